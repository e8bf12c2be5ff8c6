"""Whether anything has moved in a study and its program since a run that left nothing to do.

Snakemake decides what has to be done, and for thousands of scans it takes a while to say: nothing. Its answer holds as
long as no file has moved that it could have looked at. So a finished run leaves a mark: one hash of path, size and
dates of every file it could have looked at before it, and one of all that it left. While both are as they were, the
answer is the same, and one walk over the folders tells. Any difference, a mere touch included, asks Snakemake.

Only the standard library is used, so that the start script can ask by itself.
"""

import contextlib
import hashlib
import json
import os
import time
from collections.abc import Iterable, Iterator
from pathlib import Path

MARK_NAME = ".evenblur/unchanged.json"

# A file may change again under the same date on disks with coarse dates, so one this young is not trusted.
_SETTLING_NS = 2_000_000_000
_PROGRAM = ("Snakefile", "scripts", "workflow", "envs")
_ENVIRONMENT = ".venv/evenblur.json"
_CACHES = frozenset({"__pycache__"})
_OWN_NOTES = (".evenblur/provenance.txt", ".evenblur/history.json", ".evenblur/gathered")
_SNAKEMAKES = (".snakemake/metadata", ".snakemake/incomplete")


def state_before(study_dir: Path, program_dir: Path, results: str) -> str:
    """A hash of all that a run starts from: the study's files but its results, and the program.

    Parameters
    ----------
    study_dir, program_dir
        The study folder and the program's.
    results
        Name of the results folder in the study folder.

    Returns
    -------
    str
        Empty where it cannot be told: something may not be read, or changed within the last two seconds.
    """
    try:
        environment = (program_dir / _ENVIRONMENT).read_text(encoding="utf-8")
        own = _lines(study_dir, left_out={results, "history.tsv"})
        program = (line for name in _PROGRAM for line in _lines(program_dir / name))
        return _digest([*own, *program], f"{program_dir.resolve()} {environment}", settled=True)
    except OSError:
        return ""


def state_after(study_dir: Path, results: str) -> str:
    """A hash of all that a run leaves: results, history, and the records of how they were made; empty as above."""
    try:
        lines = [line for name in (results, "history.tsv", *_OWN_NOTES) for line in _lines(study_dir / name)]
        # A record that comes or goes dates its folder; thousands of files less to look at.
        lines += [_line(study_dir / name, name) for name in _SNAKEMAKES]
        return _digest(lines)
    except OSError:
        return ""


def is_marked(study_dir: Path, before: str, after: str) -> bool:
    """Whether a run left nothing to do in just this state."""
    try:
        found = json.loads((study_dir / MARK_NAME).read_text(encoding="utf-8"))
    except (OSError, ValueError):
        return False
    return bool(before and after) and found == {"before": before, "after": after}


def set_mark(study_dir: Path, before: str, after: str) -> None:
    """Note that a run which began in the one state left nothing to do in the other; no note where one is unknown."""
    path = study_dir / MARK_NAME
    if before and after:
        with contextlib.suppress(OSError):  # without the note, the next run asks
            path.parent.mkdir(exist_ok=True)
            draft = path.with_name(path.name + ".part")
            draft.write_text(json.dumps({"before": before, "after": after}) + "\n", encoding="utf-8")
            draft.replace(path)


def remove_mark(study_dir: Path) -> None:
    """Take the note away: a run begins, and who knows how it ends."""
    with contextlib.suppress(OSError):
        (study_dir / MARK_NAME).unlink()


class Mark:
    """The note for one run.

    Parameters
    ----------
    study_dir, program_dir, results
        As for `state_before`.
    of_use
        Whether the run asks for all; a note on anything less would mislead.
    """

    def __init__(self, study_dir: Path, program_dir: Path, results: str, *, of_use: bool) -> None:
        self._study_dir = study_dir
        self._results = results
        # Taken before Snakemake looks: what changes while it works shall differ from it.
        self._before = state_before(study_dir, program_dir, results) if of_use else ""

    def stands(self) -> bool:
        """Whether a run left nothing to do and nothing moved since."""
        after = state_after(self._study_dir, self._results) if self._before else ""
        return is_marked(self._study_dir, self._before, after)

    def begin(self) -> None:
        """A run begins, and who knows how it ends."""
        remove_mark(self._study_dir)

    def end(self) -> None:
        """The run left nothing to do."""
        if self._before:
            set_mark(self._study_dir, self._before, state_after(self._study_dir, self._results))


def _digest(lines: Iterable[str], first: str = "", *, settled: bool = False) -> str:
    newest = time.time_ns() - _SETTLING_NS
    total = hashlib.sha256(first.encode())
    for line in sorted(lines):
        if settled and int(line.rpartition(" ")[2]) > newest:
            return ""
        total.update(os.fsencode(f"\n{line}"))
    return total.hexdigest()


def _lines(top: Path, left_out: Iterable[str] = ()) -> Iterator[str]:
    """A line for every file below a folder, or for the one file; what is hidden in the folder itself is left out.

    Links are followed, since images are often links into an archive; a folder that was seen is not entered again.
    """
    if not top.is_dir():
        yield _line(top, top.name)
        return
    seen: set[tuple[int, int]] = set()
    for folder, folders, files in os.walk(top, followlinks=True, onerror=_refuse):
        here = os.stat(folder)  # noqa: PTH116 - called for thousands of folders
        if (here.st_dev, here.st_ino) in seen:
            folders.clear()
            continue
        seen.add((here.st_dev, here.st_ino))
        within = folder[len(str(top)) + 1 :]
        names = {f"{within}/{name}" if within else name: name for name in [*folders, *files]}
        chosen = {name for path, name in names.items() if not (path in left_out or path[0] == "." or name in _CACHES)}
        folders[:] = [name for name in folders if name in chosen]
        yield from (
            _line(os.path.join(folder, name), f"{top.name}/{within}/{name}")  # noqa: PTH118
            for name in files
            if name in chosen
        )


def _refuse(error: OSError) -> None:
    raise error


def _line(path: "str | os.PathLike[str]", name: str) -> str:
    """Name, size, identity and dates of a file, the date of its content last; of a link the file behind it."""
    try:
        found = os.stat(path)  # noqa: PTH116 - called for thousands of files
    except FileNotFoundError:
        return f"{name} missing 0"
    return f"{name} {found.st_size} {found.st_ino} {found.st_ctime_ns} {found.st_mtime_ns}"
