"""Were two images reconstructed alike, by what their headers and sidecars state."""

import math
import re
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

AGREE = 1e-3
"""Numbers that differ by no more than this share are the same number, written out to other lengths."""

ANALYTIC = re.compile(r"back.?projection|\bfbp|\bdirect fourier", re.IGNORECASE)
"""Methods that have neither iterations nor subsets."""

_NO_FILTER = frozenset({"", "none", "no", "nofilter", "allpass", "na"})

_TEXTS = {
    "ReconMethodName": "method",
    "ReconFilterType": "filter",
    "ReconFilterSize": "filter size",
}
_DEVICES = {
    "ManufacturersModelName": "scanner model",
    "SoftwareVersions": "software version",
    "ReconMethodImplementationVersion": "version of the reconstruction software",
}
_PARAMETERS = "ReconMethodParameters"


@dataclass(frozen=True)
class Comparison:
    """How two images' reconstructions compare.

    Attributes
    ----------
    apart
        What differs, in words, with both values where they may be told (scan first).
    unstated
        What could not be compared, because one of the two does not state it.
    """

    apart: tuple[str, ...]
    unstated: tuple[str, ...]


def compare_reconstruction(scan: Mapping[str, Any] | None, phantom: Mapping[str, Any] | None) -> Comparison:
    """Compare the reconstruction facts of a scan's and a phantom's intake record.

    Text is compared without regard to case and punctuation, numbers to 0.1 %, iterations and subsets by their label.
    A missing software version is not asked for: few files state one.

    >>> own = {"ReconMethodName": "OSEM", "ReconFilterSize": 5, "ManufacturersModelName": "sha256:1"}
    >>> other = {"ReconMethodName": "osem", "ReconFilterSize": 3, "ManufacturersModelName": "sha256:1"}
    >>> compare_reconstruction(own, other)
    Comparison(apart=('filter size (5 against 3)',), unstated=('iterations and subsets',))
    """
    own, other = dict(scan or {}), dict(phantom or {})
    apart = [
        f"{words} ({_shown(own[name])} against {_shown(other[name])})"
        for name, words in _TEXTS.items()
        if name in own and name in other and not _same(own[name], other[name])
    ]
    first, second = own.get(_PARAMETERS) or {}, other.get(_PARAMETERS) or {}
    shared = sorted(set(first) & set(second))
    apart += [
        f"{label} ({_shown(first[label])} against {_shown(second[label])})"
        for label in shared
        if not _same(first[label], second[label])
    ]
    apart += [words for name, words in _DEVICES.items() if name in own and name in other and own[name] != other[name]]
    return Comparison(tuple(apart), tuple(_unstated(own, other, parameters=bool(shared))))


def _unstated(own: Mapping[str, Any], other: Mapping[str, Any], *, parameters: bool) -> list[str]:
    both = {name for name in own if name in other}
    lacking = [] if "ReconMethodName" in both else ["method"]
    methods = [str(facts.get("ReconMethodName", "")) for facts in (own, other)]
    if not parameters and not any(ANALYTIC.search(method) for method in methods):
        lacking.append("iterations and subsets")
    unfiltered = all(_plain(facts.get("ReconFilterType", "?")) in _NO_FILTER for facts in (own, other))
    if not both & {"ReconFilterType", "ReconFilterSize"}:
        lacking.append("filter")
    elif "ReconFilterSize" not in both and not unfiltered:
        lacking.append("filter size")
    if "ManufacturersModelName" not in both:
        lacking.append("scanner model")
    return lacking


def _same(first: Any, second: Any) -> bool:
    if isinstance(first, list) or isinstance(second, list):
        ones, others = (part if isinstance(part, list) else [part] for part in (first, second))
        return len(ones) == len(others) and all(_same(a, b) for a, b in zip(ones, others, strict=True))
    if isinstance(first, int | float) and isinstance(second, int | float):
        return math.isclose(first, second, rel_tol=AGREE, abs_tol=1e-9)
    return _plain(first) == _plain(second)


def _plain(value: Any) -> str:
    return re.sub(r"[\W_]+", "", str(value).casefold())


def _shown(value: Any) -> str:
    if isinstance(value, list):
        return ", ".join(_shown(part) for part in value)
    return f"{value:g}" if isinstance(value, int | float) else str(value)
