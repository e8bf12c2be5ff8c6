"""The ledger of image identities: which bytes stand behind each path of the tables.

An image is hashed again only when its size or date changed, so that a run with nothing to do costs a look at each
file. Results follow the hash, not the date: a touched or copied file changes nothing, a replaced one always counts.
"""

import hashlib
import json
import os
import time
from pathlib import Path
from typing import Any

from evenblur.command import write_text
from evenblur.images.digests import image_files, image_sha256
from evenblur.images.extent import Extent, image_extent

LEDGER_NAME = ".evenblur/digests.json"
MISSING = "missing"
UNREADABLE = "unreadable"

# Dates of files are coarse on some disks: a file that changed this shortly before it was hashed could change again
# under the same date, so its date is not trusted at the next run.
_SETTLING_NS = 2_000_000_000


class Ledger:
    """Identities of images by their path relative to the study folder.

    Parameters
    ----------
    study_dir
        The study folder.
    look
        Whether to look at the files. Jobs of a running workflow pass False: for them the ledger stands as the main
        process left it, so that a whole run agrees on what each image is.
    """

    def __init__(self, study_dir: Path, *, look: bool = True) -> None:
        self._study_dir = study_dir
        self._look = look
        self._entries: dict[str, dict[str, Any]] = _load(study_dir / LEDGER_NAME)
        self._asked: dict[str, str] = {}
        self._changed = False

    def digest(self, name: str) -> str:
        """SHA-256 of the image at this path; `missing` where there is none, `unreadable` where it may not be read."""
        if name not in self._asked:
            self._asked[name] = self._digest(name)
        return self._asked[name]

    def extent(self, name: str) -> Extent:
        """Voxels and frames of the image at this path, read once for each state of the file; nothing where none is."""
        if self.digest(name) in (MISSING, UNREADABLE):
            return Extent(0, 1)
        entry = self._entries[name]
        if "voxels" not in entry:
            try:
                found = image_extent(self._study_dir / name)
            except OSError:
                return Extent(0, 1)
            entry.update(voxels=found.voxels, frames=found.frames)
            self._changed = True
        return Extent(int(entry["voxels"]), int(entry["frames"]))

    def _digest(self, name: str) -> str:
        known = self._entries.get(name)
        if not self._look and known is not None:
            return str(known["sha256"])
        path = self._study_dir / name
        try:
            state = _state(path)
        except FileNotFoundError:
            state = {"size": None, "mtime_ns": None}
        except OSError:
            return UNREADABLE
        if known is not None and not known.get("settling") and all(known.get(key) == state[key] for key in state):
            return str(known["sha256"])
        entry: dict[str, Any] = dict(state)
        if state["size"] is None:
            entry["sha256"] = MISSING
        else:
            if time.time_ns() - state["mtime_ns"] < _SETTLING_NS:
                entry["settling"] = True
            try:
                entry["sha256"] = image_sha256(path)
            except OSError:
                return UNREADABLE
        if entry != known:
            self._entries[name] = entry
            self._changed = True
        return str(entry["sha256"])

    def save(self) -> None:
        """Write the ledger if it changed; paths that nobody asked for are dropped."""
        if not self._look:
            return
        kept = {name: self._entries[name] for name in sorted(self._asked) if name in self._entries}
        if self._changed or len(kept) != len(self._entries):
            path = self._study_dir / LEDGER_NAME
            path.parent.mkdir(parents=True, exist_ok=True)
            write_text(path, json.dumps(kept, indent=0) + "\n")
            self._changed = False


def _load(path: Path) -> dict[str, dict[str, Any]]:
    """The stored entries; a lost or damaged ledger costs one hashing of everything, nothing else."""
    try:
        entries = json.loads(path.read_text(encoding="utf-8"))
        return {str(name): dict(entry) for name, entry in entries.items() if "sha256" in entry}
    except (OSError, ValueError, AttributeError, TypeError, RecursionError):
        return {}


def _state(path: Path) -> dict[str, Any]:
    """Size and date of an image; for a folder their sums up over its files, with a hash of each file's own."""
    found = path.stat()
    if not path.is_dir():
        several = image_files(path)
        if len(several) == 1:
            return {"size": found.st_size, "mtime_ns": found.st_mtime_ns}
        names = [str(file) for file in several]
    else:
        below = [os.path.join(folder, name) for folder, _, files in os.walk(path) for name in files]  # noqa: PTH118
        names = [name for name in below if os.path.isfile(name)]  # noqa: PTH113 - no pipes, no links to nowhere
    size, newest, lines = 0, 0, []
    for name in names:
        found = os.stat(name)  # noqa: PTH116 - called for thousands of files
        size, newest = size + found.st_size, max(newest, found.st_mtime_ns)
        lines.append(f"{os.path.relpath(name, path.parent)} {found.st_size} {found.st_mtime_ns}")
    files = hashlib.sha256(os.fsencode("\n".join(sorted(lines)))).hexdigest()
    return {"size": size, "mtime_ns": newest, "files": files}
