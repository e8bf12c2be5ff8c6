"""YAML as study files need it: plain values only, nothing repeated, nothing that grows."""

import re
import unicodedata
from typing import Any

import yaml

LONGEST_TEXT = 200_000
"""The longest text that is read: no study file comes near it, and reading takes its time."""


class _PlainLoader(yaml.SafeLoader):
    """Safe YAML where only true and false are truth values, so that the key `on` and the word `no` stay words.

    Anchors are refused (a short text could unfold into a huge one) and so are repeated keys (the first would be
    lost without a word).
    """

    def compose_node(self, parent: Any, index: Any) -> Any:
        if self.check_event(yaml.events.AliasEvent):
            raise yaml.YAMLError(f"line {self.peek_event().start_mark.line + 1}: anchors and aliases are not used here")
        return super().compose_node(parent, index)

    def construct_mapping(self, node: Any, deep: bool = False) -> dict[Any, Any]:
        seen: set[Any] = set()
        for key_node, _ in node.value:
            key = self.construct_object(key_node, deep=True)
            line = key_node.start_mark.line + 1
            if not isinstance(key, str):
                raise yaml.YAMLError(f"line {line}: the key {key!r} is not a word")
            if key in seen:
                raise yaml.YAMLError(f"line {line}: the key `{key}` stands twice")
            seen.add(key)
        return super().construct_mapping(node, deep)


_PlainLoader.yaml_implicit_resolvers = {
    first: [(tag, pattern) for tag, pattern in resolvers if tag != "tag:yaml.org,2002:bool"]
    for first, resolvers in yaml.SafeLoader.yaml_implicit_resolvers.items()
}
_PlainLoader.yaml_implicit_resolvers.pop("<", None)
for _first in "tTfF":
    _PlainLoader.add_implicit_resolver(
        "tag:yaml.org,2002:bool", re.compile(r"^(?:true|True|TRUE|false|False|FALSE)$"), [_first]
    )


def parse_yaml(text: str) -> Any:
    """Parse YAML text into plain values.

    Raises
    ------
    ValueError
        With one line that says where the text is wrong.

    >>> parse_yaml("{on: 2026-03-31, use: no}")["use"]
    'no'
    """
    if len(text) > LONGEST_TEXT:
        raise ValueError(f"the text is longer than {LONGEST_TEXT} characters")
    try:
        values = yaml.load(text, Loader=_PlainLoader)
        _refuse_control(values)
        return values
    except (yaml.YAMLError, RecursionError, ValueError) as error:
        mark = getattr(error, "problem_mark", None)
        if mark is not None:
            raise ValueError(f"line {mark.line + 1}: not valid YAML ({getattr(error, 'problem', error)})") from None
        raise ValueError(" ".join(str(error).split()) or "not valid YAML") from None


def _refuse_control(value: Any) -> None:
    """Refuse control characters and half characters, which escapes can spell: no output could hold them."""
    if isinstance(value, dict):
        for key, part in value.items():
            _refuse_control(key)
            _refuse_control(part)
    elif isinstance(value, list):
        for part in value:
            _refuse_control(part)
    elif isinstance(value, str) and any(
        unicodedata.category(sign) in ("Cc", "Cs") for sign in value.replace("\n", " ")
    ):
        raise ValueError("a text holds control characters; type it anew")
