"""Which scans a report shows before and after smoothing: a few of each site, and bounded in all."""

from collections.abc import Iterable, Mapping
from typing import Any

A_SITE = 3
"""Scans shown of each site, at most."""

IN_ALL = 60
"""Scans shown of a study, at most: their pictures then take some 2 MB of a page."""


def pictured_scans(scans: Iterable[Mapping[str, Any]], site_of: Mapping[str, str]) -> list[str]:
    """The accepted scans whose pictures a report shows, as their entities, in the order of the plan.

    Each site's periods take turns, and so do the sites where all of them would be too many.

    Parameters
    ----------
    scans
        The plan's scans.
    site_of
        Each setup's site.

    Examples
    --------
    >>> scans = [
    ...     {"entities": f"sub-{n}", "setup": "A", "phantom_session": "p" if n < 3 else "q", "status": "accepted"}
    ...     for n in range(5)
    ... ]
    >>> pictured_scans(scans, {"A": "quay"})
    ['sub-0', 'sub-1', 'sub-3']
    """
    order: dict[str, int] = {}
    sites: dict[str, dict[tuple[str, str], list[str]]] = {}
    for scan in scans:
        if scan["status"] != "accepted":
            continue
        entities, setup = str(scan["entities"]), str(scan["setup"])
        order[entities] = len(order)
        periods = sites.setdefault(site_of.get(setup, ""), {})
        periods.setdefault((setup, str(scan["phantom_session"])), []).append(entities)
    chosen = [_in_turns(list(periods.values()), A_SITE) for periods in sites.values()]
    return sorted(_in_turns(chosen, IN_ALL), key=order.__getitem__)


def _in_turns(groups: list[list[str]], most: int) -> list[str]:
    """One of each group after another, as many as there may be."""
    rounds = max(map(len, groups), default=0)
    turns = [group[number] for number in range(rounds) for group in groups if number < len(group)]
    return turns[:most]
