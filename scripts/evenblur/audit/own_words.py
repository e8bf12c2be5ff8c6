"""Keep one site's papers free of other sites: their labels, subjects and hashes never stand in them.

Sentences may name what lies elsewhere (two rows with the same picture, a reason typed into a table). A word that
belongs to other sites alone is replaced; a word that the site uses itself stays.
"""

import re
from collections.abc import Iterable, Mapping
from typing import Any

from evenblur.audit.inputs import AuditInput, Row, scan_entities

ELSEWHERE = "[another site’s]"
"""What stands in the place of another site's word."""

FREE_TEXT = frozenset(
    {"why", "text", "notes", "sentence", "reason", "decided_by", "scanner", "reconstruction", "declared_source"}
    | {"input", "image"}
)
"""Fields of the audit's data that hold sentences, or words that people wrote."""

_TOKEN = re.compile(r"[A-Za-z0-9_-]+")


class OwnWords:
    """Other sites' words, taken out of texts.

    Parameters
    ----------
    site
        The site whose papers they are.
    words
        For each site the words that are its own, in any letter case.

    Examples
    --------
    >>> own = OwnWords("quay", {"quay": ["quay", "quay-1"], "mill": ["mill", "mill-1", "sub-m02"]})
    >>> own.text("quay-1 has the picture of sub-m02_ses-base, per mm of mill.1")
    'quay-1 has the picture of [another site’s], per mm of [another site’s].1'
    """

    def __init__(self, site: str, words: Mapping[str, Iterable[str]]) -> None:
        self._site = site
        self._users = _users(words)

    @classmethod
    def of_all(cls, words: Mapping[str, Iterable[str]]) -> "dict[str, OwnWords]":
        """The same for every site of `words`, which look their words up in one place.

        >>> own = OwnWords.of_all({"quay": ["quay-1"], "mill": ["mill-1"]})
        >>> own["mill"].text("quay-1, mill-1")
        '[another site’s], mill-1'
        """
        users, found = _users(words), {site: cls(site, {}) for site in words}
        for own in found.values():
            own._users = users
        return found

    def text(self, text: str) -> str:
        """A text without other sites' words."""
        return _TOKEN.sub(lambda found: ELSEWHERE if self._is_foreign(found.group()) else found.group(), text)

    def value(self, value: Any, *, free: bool = False) -> Any:
        """Plain data without other sites' words in what people wrote; labels, codes and verdicts stay as they are."""
        if isinstance(value, str):
            return self.text(value) if free else value
        if isinstance(value, list):
            return [self.value(part, free=free) for part in value]
        if isinstance(value, dict):
            return {key: self.value(part, free=free or key in FREE_TEXT) for key, part in value.items()}
        return value

    def _is_foreign(self, token: str) -> bool:
        folded = token.casefold()
        return any(self._site not in self._users.get(part, {self._site}) for part in (folded, *folded.split("_")))


def _users(words: Mapping[str, Iterable[str]]) -> dict[str, set[str]]:
    """For each word the sites that use it."""
    found: dict[str, set[str]] = {}
    for site, some in words.items():
        for word in filter(None, some):
            found.setdefault(word.casefold(), set()).add(site)
    return found


def words_by_site(audit: AuditInput) -> dict[str, set[str]]:
    """Each site's own words: labels of site, setups and phantoms, subjects (`sub-X`), scans, hashes of its images.

    A subject's bare label counts where it has letters and digits: `12` and `base` are everybody's words.
    """
    site_of = {str(row["setup"]): str(row.get("site") or "") for row in audit.setups}
    words: dict[str, set[str]] = {site: {site} for site in site_of.values() if site}
    for setup, site in site_of.items():
        words.setdefault(site, set()).add(setup)
    for row in audit.phantoms:
        label = str(row["phantom"])
        digest = (audit.resolution.get(label, {}).get("input") or {}).get("sha256")
        own = {label, str(digest or ""), str(audit.intake_phantoms.get(label, {}).get("sha256") or "")}
        words.setdefault(site_of.get(str(row["setup"]), ""), set()).update(own)
    for row in [*audit.scans, *audit.plan.get("scans", [])]:
        words.setdefault(site_of.get(str(row["setup"]), ""), set()).update(_scan_words(row, audit))
    return words


def _scan_words(row: Row, audit: AuditInput) -> set[str]:
    subject, entities = str(row["subject"]), scan_entities(row)
    made = audit.scan_records.get(entities, {}).get("Evenblur") or {}
    hashes = {str((made.get(name) or {}).get("sha256") or "") for name in ("input", "output")}
    words = {f"sub-{subject}", entities, str(row.get("sha256") or ""), *hashes}
    if re.search(r"[A-Za-z]", subject) and re.search(r"\d", subject):
        words.add(subject)
    return words
