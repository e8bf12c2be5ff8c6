"""One run at a time in a study: a lock file that names the host and the process that holds it.

Only the standard library is used, so that the start script can ask before anything is installed.
"""

import json
import os
import socket
from pathlib import Path

LOCK_NAME = ".evenblur/lock"


_FLAG_LETTERS = frozenset("FfknpqrT")
"""Letters of Snakemake's options that take no value and may stand in one bundle, as in `-np`."""


def only_looks(arguments: "list[str]") -> bool:
    """Whether a call of Snakemake with these arguments is a dry run, which may work beside another run.

    >>> only_looks(["-np"]), only_looks(["--dry-run"]), only_looks(["-sSnakefile", "-c1", "plan"])
    (True, True, False)
    """
    bundles = [argument[1:] for argument in arguments if argument[:1] == "-" and argument[1:2] != "-"]
    dry = any(bundle and "n" in bundle and set(bundle) <= _FLAG_LETTERS for bundle in bundles)
    return dry or any(argument in ("--dry-run", "--dryrun") for argument in arguments)


class StudyLockedError(RuntimeError):
    """Another run works on the study."""


class Lock:
    """What the lock file of a study says."""

    def __init__(self, host: str, process_id: int, started: str) -> None:
        self.host = host
        self.process_id = process_id
        self.started = started

    @property
    def alive(self) -> bool:
        """Whether the holder still runs; another host's holder counts as running, since nobody here can tell."""
        if self.host != socket.gethostname():
            return True
        return process_start(self.process_id) == self.started != ""

    def sentence(self, study_dir: Path) -> str:
        """The line for a person who was refused."""
        lock = study_dir / LOCK_NAME
        return (
            f"{study_dir}: another run works on this study (host {self.host}, process {self.process_id}); "
            f"wait for it, or delete {lock} if that machine is gone"
        )


def process_start(process_id: int) -> str:
    """A mark of when a process of this machine started, empty if it does not run.

    The number of a dead process is given to another one in time; its start tells the two apart.
    """
    try:
        fields = Path(f"/proc/{process_id}/stat").read_text().rpartition(")")[2].split()
        return "" if fields[0] in "ZX" else fields[19]
    except (OSError, IndexError):
        pass
    if Path("/proc/self/stat").exists():
        return ""
    try:  # no /proc (macOS): existence is the best that can be had
        os.kill(process_id, 0)
    except ProcessLookupError:
        return ""
    except PermissionError:
        pass
    return "running"


def read_lock(study_dir: Path) -> "Lock | None":
    """The study's lock, or None where there is none (a damaged lock file counts as none)."""
    return _read(Path(study_dir) / LOCK_NAME)


def _read(path: Path) -> "Lock | None":
    try:
        record = json.loads(path.read_text(encoding="utf-8"))
        return Lock(str(record["host"]), int(record["process_id"]), str(record["started"]))
    except (OSError, ValueError, KeyError, TypeError):
        return None


def take_lock(study_dir: Path) -> None:
    """Take the study's lock for this process; a lock whose holder is dead is replaced.

    Raises
    ------
    StudyLockedError
        If another run holds it.
    """
    path = Path(study_dir) / LOCK_NAME
    path.parent.mkdir(parents=True, exist_ok=True)
    own = {
        "host": socket.gethostname(),
        "process_id": os.getpid(),
        "started": process_start(os.getpid()),
    }
    draft = path.with_name(f".lock.{os.getpid()}.part")
    draft.write_text(json.dumps(own), encoding="utf-8")
    try:
        for _ in range(20):
            try:
                os.link(draft, path)  # fails where a lock stands: of two runs only one gets through
                return
            except FileExistsError:
                pass
            held = read_lock(study_dir)
            if held is not None and held.alive:
                if held.process_id == own["process_id"] and held.host == own["host"]:
                    return
                raise StudyLockedError(held.sentence(Path(study_dir)))
            # Move the dead lock aside under a name of our own: only one of several waiting runs can.
            aside = path.with_name(f".lock.{os.getpid()}.dead")
            try:
                path.rename(aside)
            except FileNotFoundError:
                continue
            moved = _read(aside)
            if moved is not None and moved.alive:  # another run was quicker and what was moved is its lock
                os.link(aside, path)
            aside.unlink()
        raise StudyLockedError(f"{study_dir}: the lock {path} cannot be taken; delete it if no run works on this study")
    finally:
        draft.unlink(missing_ok=True)


def release_lock(study_dir: Path) -> None:
    """Give the lock back if this process holds it."""
    held = read_lock(study_dir)
    if held is not None and held.process_id == os.getpid() and held.host == socket.gethostname():
        (Path(study_dir) / LOCK_NAME).unlink(missing_ok=True)
