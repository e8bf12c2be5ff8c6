"""Cut the jobs of a study into parts that a cluster takes as one submission each.

A part belongs to its members, not to their number: where one is added or removed, at most the part that it falls into
changes. So members are sorted into a binary tree by their hashes, and a branch with too many is split.
"""

import hashlib
from collections.abc import Iterable, Mapping
from typing import Any

from evenblur.errors import InputError

PART_KEY = "scans_per_submission"


def cut_into_parts(keys: Iterable[str], *, most: int) -> dict[str, list[str]]:
    """Parts of at most `most` keys each, by a name that tells the hashes' common beginning.

    Parameters
    ----------
    keys
        Distinct keys.
    most
        How many may share a part, 1 or more.

    Returns
    -------
    dict
        Keys, sorted, by name of their part: `p` and the first binary digits of their hashes.

    >>> cut_into_parts(["a", "b", "c"], most=3)
    {'p': ['a', 'b', 'c']}
    >>> cut_into_parts(["a", "b", "c"], most=2)
    {'p0': ['b', 'c'], 'p1': ['a']}
    """
    parts: dict[str, list[str]] = {}
    waiting = [("p", [(f"{int(hashlib.sha256(key.encode()).hexdigest(), 16):0256b}", key) for key in sorted(keys)])]
    while waiting:
        name, members = waiting.pop()
        if len(members) > most:
            depth = len(name) - 1
            for digit in "10":
                waiting.append((name + digit, [member for member in members if member[0][depth] == digit]))
        elif members:
            parts[name] = [key for _, key in members]
    return parts


def parts_wanted(config: Mapping[str, Any]) -> int | None:
    """How many scans a submission may carry; None where the run makes no parts (it is not on a cluster).

    Raises
    ------
    InputError
        If it is no whole number from 1 on.

    >>> parts_wanted({"scans_per_submission": 20}), parts_wanted({})
    (20, None)
    """
    given = config.get(PART_KEY)
    if given is None:
        return None
    if not str(given).isdecimal() or int(given) < 1:
        raise InputError(f"--config {PART_KEY}={given}", "is no number of scans", f"give 1 or more, as {PART_KEY}=20")
    return int(given)
