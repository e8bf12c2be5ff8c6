"""Keep measurements of phantoms, so that one that was changed and changed back is not measured a second time.

An entry stands for everything that a measurement follows from: the image's hash, the kind, the details with the
reference's hash, the code, the versions of Python and the numerical libraries, the processor's type. Labels and paths
are no part of it and are filled in anew. Only phantoms are kept, never subjects' images, and only in a folder that
nobody else can enter.
"""

import hashlib
import json
import os
import platform
import stat
from collections.abc import Callable, Mapping, Sequence
from importlib.metadata import version
from pathlib import Path
from typing import Any

from evenblur.command import write_text
from evenblur.errors import InputError

ENVIRONMENT_KEY = "EVENBLUR_PHANTOM_CACHE"
"""Tells the jobs of a run which folder its main process has looked at."""

CACHED_RULE = "measure_resolution"

_LIBRARIES = ("numpy", "scipy", "nibabel", "pydicom")
_LABELS = ("phantom", "setup", "phantom_session")


def chosen_cache(asked: Sequence[str] | None, folder: str | None) -> str:
    """The cache that a run asks for, looked at; empty where it asks for none.

    Parameters
    ----------
    asked
        Names of rules whose results are to be kept, none for all that may be; None where nothing is to be kept.
    folder
        The folder for it.

    Raises
    ------
    InputError
        If anything but measurements of phantoms is to be kept, or the folder is open to other users.

    >>> chosen_cache(None, "/anywhere")
    ''
    """
    others = sorted(set(asked or ()) - {CACHED_RULE})
    if others:
        raise InputError(f"--cache {' '.join(others)}", "only measurements of phantoms may be kept", "name no rule")
    if asked is None or not folder:
        return ""
    check_closed(Path(folder))
    return str(Path(folder).resolve())


def check_closed(folder: Path) -> None:
    """See that a cache's folder belongs to the user and is closed to everybody else; make it where there is none.

    Raises
    ------
    InputError
        If it is open, is someone else's, or is no folder.
    """
    try:
        folder.mkdir(mode=0o700, parents=True, exist_ok=True)
        found = folder.stat()
    except OSError as error:
        wrong = f"cannot be used as cache ({error.strerror})"
        raise InputError(str(folder), wrong, "name a folder of your own in SNAKEMAKE_OUTPUT_CACHE") from error
    if found.st_uid != os.geteuid():
        raise InputError(str(folder), "the cache belongs to another user", "name a folder of your own")
    if stat.S_IMODE(found.st_mode) & 0o077:
        raise InputError(str(folder), "the cache is open to other users", f"close it: chmod go-rwx {folder}")


def measured_once(
    folder: Path, facts: Mapping[str, Any], *, record_facts: Mapping[str, Any], measure: Callable[[], dict[str, Any]]
) -> tuple[dict[str, Any], bool]:
    """A phantom's record, from the cache or measured and kept.

    Parameters
    ----------
    folder
        The cache.
    facts
        What the measurement follows from, as plain data; see `measurement_facts`.
    record_facts
        What this study calls it: labels, and `path` of the image.
    measure
        Measures the phantom.

    Returns
    -------
    dict
        The record.
    bool
        Whether it came from the cache.

    Raises
    ------
    InputError
        If the folder is open to other users, and what `measure` raises.
    """
    check_closed(folder)
    key = hashlib.sha256(_text(facts).encode()).hexdigest()
    entry = folder / f"{key}.json"
    kept = _read(entry, facts)
    if kept is not None:
        kept |= {label: record_facts[label] for label in _LABELS}
        kept["input"]["path"] = record_facts["path"]
        return kept, True
    record = measure()
    if record["in_plane"] is not None or record["axial"] is not None:  # what failed may have other causes
        bare = {**record, **dict.fromkeys(_LABELS, ""), "input": {**record["input"], "path": ""}}
        state = {"facts": dict(facts), "record": bare, "sha256": hashlib.sha256(_text(bare).encode()).hexdigest()}
        write_text(entry, json.dumps(state, indent=1) + "\n")
        entry.chmod(0o600)
    return record, False


def measurement_facts(
    *, kind: str, details: Mapping[str, Any], code_token: str, sha256: str, reference_sha256: str | None
) -> dict[str, Any]:
    """Everything that a measurement follows from, as plain data."""
    return {
        "code": code_token,
        "details": {name: value for name, value in details.items() if name != "reference"},
        "image": sha256,
        "kind": kind,
        "processor": platform.machine(),
        "python": platform.python_version(),
        "reference": reference_sha256,
        "versions": {name: version(name) for name in _LIBRARIES},
    }


def _read(entry: Path, facts: Mapping[str, Any]) -> dict[str, Any] | None:
    """A kept record; None where there is none, or where it is damaged or stands for something else."""
    try:
        state = json.loads(entry.read_text(encoding="utf-8"))
        record = dict(state["record"])
        whole = state["sha256"] == hashlib.sha256(_text(record).encode()).hexdigest()
        return record if whole and _text(state["facts"]) == _text(facts) else None
    except (OSError, ValueError, KeyError, TypeError):
        return None


def _text(value: Any) -> str:
    return json.dumps(value, sort_keys=True)
