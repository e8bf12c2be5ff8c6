"""Labels that are valid in a study's tables and unique whatever the case of their letters."""

import hashlib
import re
import unicodedata
from collections.abc import Iterable

RESERVED = "declared"
_LONGEST_SITE = 40
_FEWEST_DIGITS = 6


def site_label(name: str) -> str:
    """A site's name as a label: letters, digits and single hyphens.

    >>> site_label("Mill Clinic, Ödby"), site_label("7"), site_label("Declared")
    ('Mill-Clinic-Odby', 'site-7', 'site-Declared')
    """
    plain = unicodedata.normalize("NFKD", name).encode("ascii", "ignore").decode()
    label = re.sub(r"[^A-Za-z0-9]+", "-", plain).strip("-")[:_LONGEST_SITE].strip("-")
    if not label:
        return hashed_labels([name])[normal(name)]
    return f"site-{label}" if label.isdigit() or label.lower() == RESERVED else label


def bids_label(text: str) -> str:
    """A label of letters and digits only; the sign + that newer BIDS labels may hold is spelled out.

    >>> bids_label("NUY001"), bids_label("a+b")
    ('NUY001', 'aplusb')
    """
    return re.sub(r"[^A-Za-z0-9]", "", text.replace("+", "plus"))


def hashed_labels(names: Iterable[str]) -> dict[str, str]:
    """Labels of institutions that do not tell their names, by the name in `normal` form.

    A label is `site-` and the first hexadecimal digits of the name's SHA-256, so that it is the same in every study.
    Whoever has a list of candidates can find the name: the label is a pseudonym, not a secret.

    >>> hashed_labels(["Quay Imaging (invented)", " QUAY imaging  (invented)"])
    {'quay imaging (invented)': 'site-63c0e9'}
    """
    digests = {name: hashlib.sha256(name.encode()).hexdigest() for name in sorted({normal(name) for name in names})}
    digits = _FEWEST_DIGITS
    while len({digest[:digits] for digest in digests.values()}) < len(digests):
        digits += 1
    return {name: f"site-{digest[:digits]}" for name, digest in digests.items()}


def named_labels(names: Iterable[str]) -> dict[str, str]:
    """Labels of institutions or sites that keep their names, by the name in `normal` form.

    Two names that become the same label get a number.

    >>> named_labels(["Mill A/B", "mill a-b", "Quay", "quay"])
    {'mill a-b': 'mill-a-b', 'mill a/b': 'Mill-A-B-2', 'quay': 'Quay'}
    """
    spelled: dict[str, str] = {}
    for name in sorted(names):
        spelled.setdefault(normal(name), name)
    taken: set[str] = set()
    return {name: unique(site_label(spelled[name]), taken) for name in sorted(spelled)}


def unique(label: str, taken: set[str]) -> str:
    """The label, with a number behind it if it is taken in any case; it is then taken.

    >>> unique("A", {"a"})
    'A-2'
    """
    found, number = label, 1
    while found.lower() in taken:
        number += 1
        found = f"{label}-{number}"
    taken.add(found.lower())
    return found


def normal(name: str) -> str:
    """A name without what spelling adds: case and spaces.

    >>> normal("  Quay  IMAGING ")
    'quay imaging'
    """
    return " ".join(unicodedata.normalize("NFKC", name).casefold().split())
