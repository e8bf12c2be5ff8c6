"""What a check says: the first thing that does not agree, as one sentence."""

import json
import math
import re
from collections.abc import Mapping
from pathlib import Path
from typing import Any


class DisagreementError(Exception):
    """Something in the bag or the study does not agree with the rest: where, and what was found and expected."""

    def __init__(self, where: str, what: str) -> None:
        # A bag comes from elsewhere: nothing in it may give the terminal orders.
        super().__init__(shown(f"{where}: {what}"))


def shown(text: str) -> str:
    r"""Text in one line, without signs that a terminal obeys.

    >>> shown("a\x1b[2J")
    'a?[2J'
    """
    return "".join(sign if sign.isprintable() else "?" for sign in " ".join(text.split()))


def same_text(where: str, found: Any, expected: Any) -> None:
    """Compare two texts (None counts as empty).

    Raises
    ------
    DisagreementError
        If they differ.
    """
    if _text(found) != _text(expected):
        raise DisagreementError(where, f"says {_shown(found)}, and {_shown(expected)} follows from the records")


def same_codes(where: str, found: str, expected: set[str]) -> None:
    """Compare codes joined by `;`, in any order.

    Raises
    ------
    DisagreementError
        If they differ.
    """
    same_text(where, ";".join(sorted(filter(None, found.split(";")))), ";".join(sorted(expected)))


def same_number(where: str, found: Any, expected: float | None, *, decimals: int = 4) -> None:
    """Compare a number as a table or record has it with the one it was rounded from.

    The last decimal decides: a number is right if no other one of so many decimals lies nearer.

    Raises
    ------
    DisagreementError
        If it is another number, or one of the two is missing.

    >>> same_number("a", "1.2346", 1.23456)
    >>> same_number("a", "1.2345", 1.23456)
    Traceback (most recent call last):
    evenblur.check.findings.DisagreementError: a: says 1.2345, and 1.2346 follows from the records
    """
    text = _text(found)
    if expected is None or text == "":
        agree = expected is None and text == ""
    else:
        value = _number(text)
        agree = value is not None and abs(value - expected) <= 0.5 * 10.0**-decimals + 1e-9 * (1 + abs(expected))
        agree = agree and len(text.partition(".")[2]) <= decimals
    if not agree:
        shown = "nothing" if expected is None else f"{expected:.{decimals}f}"
        raise DisagreementError(where, f"says {_shown(found)}, and {shown} follows from the records")


def _number(text: str) -> float | None:
    try:
        value = float(text)
    except ValueError:
        return None
    return value if math.isfinite(value) else None


def _text(value: Any) -> str:
    return "" if value is None else str(value)


def _shown(value: Any) -> str:
    text = _text(value)
    return "nothing" if text == "" else text if len(text) < 80 else f"{text[:76]}..."


def read_json(folder: Path, name: str) -> dict[str, Any]:
    """A record of the bag.

    Raises
    ------
    DisagreementError
        If it is missing or no JSON object.
    """
    try:
        content = json.loads((folder / name).read_text(encoding="utf-8"))
    except FileNotFoundError:
        raise DisagreementError(name, "is not there, and a row of the study asks for it") from None
    except (OSError, ValueError, RecursionError):
        raise DisagreementError(name, "cannot be read as JSON") from None
    if not isinstance(content, dict):
        raise DisagreementError(name, "is no JSON object")
    return content


def read_table(folder: Path, name: str) -> list[dict[str, str]]:
    """A tab-separated table of the bag, one dictionary a row.

    Raises
    ------
    DisagreementError
        If it is missing, or a row has too many or too few cells.
    """
    try:
        lines = (folder / name).read_text(encoding="utf-8").split("\n")
    except (OSError, ValueError):
        raise DisagreementError(name, "cannot be read") from None
    if len(lines) < 2 or lines[-1] != "":
        raise DisagreementError(name, "does not end with a whole line")
    header = lines[0].split("\t")
    rows = [line.split("\t") for line in lines[1:-1]]
    for number, row in enumerate(rows, start=2):
        if len(row) != len(header):
            raise DisagreementError(f"{name}, line {number}", f"has {len(row)} cells under {len(header)} columns")
    return [dict(zip(header, row, strict=True)) for row in rows]


def entry(record: Mapping[str, Any], *keys: str) -> Any:
    """A value deep in a record; None where any step is missing.

    >>> entry({"a": {"b": 1}}, "a", "b"), entry({"a": None}, "a", "b")
    (1, None)
    """
    value: Any = record
    for key in keys:
        if not isinstance(value, Mapping):
            return None
        value = value.get(key)
    return value


def table_cell(text: str) -> str:
    """Free text as a tab-separated table has it: one line, an apostrophe before what a spreadsheet takes for a formula.

    >>> table_cell("=1+1"), table_cell("-0.5")
    ("'=1+1", '-0.5')
    """
    line = " ".join(text.split())
    number = re.fullmatch(r"[+-]?[0-9.]+(e[+-]?[0-9]+)?|-[A-Za-z0-9-]*", line)
    return f"'{line}" if line.startswith(tuple("=+-@＝＋－＠")) and not number else line
