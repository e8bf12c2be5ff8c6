"""The study's change log, history.tsv: what changed, when, why, each line bound to the one before by its hash.

A line says that one thing (`item`) changed in one respect (`what`) from `old` to `new`. A new thing is one line with
all that is known of it, so the first run of a large study writes one line a scan. What was last recorded follows from
the lines themselves, so that the log needs no second file to go on from. Hashes bind the lines to each other; the
number of lines and the hash of the last one are kept elsewhere as well, so that a removed last line shows too.
"""

import contextlib
import datetime
import hashlib
import json
import os
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from evenblur.command import write_text
from evenblur.errors import InputError
from evenblur.printable import is_formula

HISTORY_NAME = "history.tsv"
HEAD_NAME = ".evenblur/history.json"
COLUMNS = ("date", "item", "what", "old", "new", "reason", "previous_sha256")
_HEADER = "\t".join(COLUMNS)

ADDED, REMOVED = "added", "removed"
WITHDRAWN, DISAGREEMENT = "withdrawn", "disagreement"
_EVENTS = frozenset({WITHDRAWN, DISAGREEMENT})
"""Lines that tell of a deed or a finding and change nothing of what is recorded about an item."""

State = dict[str, dict[str, str]]
"""What is known of each item: its fields as text, fields without content left out."""


@dataclass(frozen=True)
class Entry:
    """One line of the history without its date and hash."""

    item: str
    what: str
    old: str = ""
    new: str = ""
    reason: str = ""


def clean(text: Any) -> str:
    """A value as it stands in a cell: one line, no tabs.

    >>> clean("  to the new" + chr(9) + "room" + chr(10))
    'to the new room'
    """
    line = str(text)
    if not line.isprintable():
        line = "".join(sign if sign.isprintable() else " " for sign in line)
    return " ".join(line.split())


def guarded(text: str) -> str:
    """A cell that no spreadsheet runs; `unguarded` gives the text back.

    >>> guarded("=1+1"), guarded("-0.5"), guarded("'quoted'")
    ("'=1+1", '-0.5', "''quoted'")
    """
    return f"'{text}" if is_formula(text) or text.startswith("'") else text


def unguarded(cell: str) -> str:
    """The text of a cell.

    >>> unguarded(guarded("=1+1")), unguarded(guarded("'x")), unguarded("y")
    ('=1+1', "'x", 'y')
    """
    return cell.removeprefix("'")


def today(given: str | None = None) -> str:
    """The day (UTC) that lines get: as given, by SOURCE_DATE_EPOCH (reproducible-builds.org), or by the clock.

    Raises
    ------
    InputError
        If what is given is no date.

    >>> today("2026-03-31")
    '2026-03-31'
    """
    epoch = os.environ.get("SOURCE_DATE_EPOCH")
    try:
        if given is not None:
            return datetime.date.fromisoformat(given).isoformat()
        if epoch:
            return datetime.datetime.fromtimestamp(int(epoch), tz=datetime.UTC).date().isoformat()
    except (ValueError, OverflowError, OSError):
        where = "SOURCE_DATE_EPOCH" if given is None else "--date"
        mend = "give seconds since 1970" if given is None else "write year-month-day"
        raise InputError(where, f"`{epoch if given is None else given}` is no date", mend) from None
    return datetime.datetime.now(tz=datetime.UTC).date().isoformat()


# --- reading


def _sha256(line: str) -> str:
    return hashlib.sha256(line.encode()).hexdigest()


def _read(history_file: Path) -> tuple[list[str], bool]:
    """The lines after the header, and whether the file begins as ours do (a file that is not there does)."""
    try:
        # Bytes, so that line ends of another system count as a change.
        text = history_file.read_bytes().decode("utf-8", errors="replace")
    except FileNotFoundError:
        return [], True
    lines = text.removesuffix("\n").split("\n") if text else []
    begins = lines[:1] == [_HEADER]
    return (lines[1:] if begins else lines), begins


def _lines(history_file: Path) -> list[str]:
    return _read(history_file)[0]


def _head_of(lines: list[str]) -> dict[str, Any]:
    return {"lines": len(lines), "sha256": _sha256(lines[-1] if lines else _HEADER)}


def head(history_file: Path) -> dict[str, Any]:
    """How many lines the history has and the SHA-256 of its last one (of its header where it has none)."""
    return _head_of(_lines(history_file))


def verify(history_file: Path) -> list[str]:
    """What is wrong with the chain of lines: sentences, none for a whole history or none at all."""
    return _verify(*_read(history_file))


def _verify(lines: list[str], begins: bool) -> list[str]:
    found = [] if begins else ["history.tsv does not begin with its header."]
    before = _sha256(_HEADER)
    for number, line in enumerate(lines, start=1):
        cells = line.split("\t")
        if len(cells) != len(COLUMNS):
            found.append(f"history.tsv, line {number}, has {len(cells)} columns instead of {len(COLUMNS)}.")
        elif cells[-1] != before:
            found.append(
                f"history.tsv, line {number}, follows a line with the hash {clean(cells[-1])[:12]}, but the line "
                f"before it has {before[:12]}: a line was changed, added or taken out."
            )
        before = _sha256(line)
    return found


def entries(history_file: Path, *, after: int = 0) -> list[tuple[str, Entry]]:
    """Lines of the history after the given number of them, with their dates; what is no line of ours is left out.

    The file may have been altered: what is read from it is printable, as what was written.
    """
    rows = (line.split("\t") for line in _lines(history_file)[after:])
    whole = ([unguarded(clean(cell)) for cell in cells] for cells in rows if len(cells) == len(COLUMNS))
    return [(cells[0], Entry(*cells[1:-1])) for cells in whole]


def fold(found: Iterable[tuple[str, Entry]]) -> State:
    """What the lines come to: the state that was last recorded.

    >>> first = Entry("target", "added", new='{"in_plane_mm": "8.0"}')
    >>> fold([("2026-01-01", first), ("2026-01-02", Entry("target", "in_plane_mm", "8.0", "8.1"))])
    {'target': {'in_plane_mm': '8.1'}}
    """
    state: State = {}
    for _, entry in found:
        if entry.what in _EVENTS:
            continue
        if entry.what == REMOVED:
            state.pop(entry.item, None)
        elif entry.what == ADDED:
            state[entry.item] = _fields(entry.new)
        else:
            fields = state.setdefault(entry.item, {})
            fields.pop(entry.what, None)
            if entry.new:
                fields[entry.what] = entry.new
    return state


def _fields(text: str) -> dict[str, str]:
    with contextlib.suppress(ValueError):
        found = json.loads(text)
        if isinstance(found, dict):
            return {str(name): str(value) for name, value in found.items()}
    return {}


def differences(old: State, new: State, *, reasons: Mapping[str, str] | None = None) -> list[Entry]:
    """The lines that lead from one state to another, in the new state's order, removed items last."""
    told = reasons or {}
    found = []
    for item, fields in new.items():
        if item not in old:
            found.append(Entry(item, ADDED, "", _packed(fields), told.get(item, "")))
            continue
        before = old[item]
        for name in [*fields, *(name for name in before if name not in fields)]:
            if before.get(name, "") != fields.get(name, ""):
                found.append(Entry(item, name, before.get(name, ""), fields.get(name, ""), told.get(item, "")))
    found += [Entry(item, REMOVED, _packed(fields)) for item, fields in old.items() if item not in new]
    return found


def _packed(fields: Mapping[str, str]) -> str:
    return json.dumps({name: value for name, value in fields.items() if value}, ensure_ascii=False)


# --- whether the file is still what was recorded


def disagreements(study_dir: Path, recorded: Path | None = None) -> list[str]:
    """Findings that the history was changed by another hand, those that it tells of itself and new ones.

    Parameters
    ----------
    study_dir
        The study folder.
    recorded
        A record among the results that holds the number of lines and the last hash, if there is one.

    Returns
    -------
    list
        Sentences, sorted. A finding stays: it is written into the history, so that the list is the same afterwards.
    """
    return sorted({*told_disagreements(study_dir), *_new_disagreements(study_dir, recorded)})


def told_disagreements(study_dir: Path) -> list[str]:
    """Findings that stand in the history itself."""
    found = entries(study_dir / HISTORY_NAME)
    return [entry.reason for _, entry in found if entry.what == DISAGREEMENT]


def _new_disagreements(study_dir: Path, recorded: Path | None) -> list[str]:
    lines, begins = _read(study_dir / HISTORY_NAME)
    told = set(told_disagreements(study_dir))
    sentences = _verify(lines, begins)
    found = _head_of(lines)
    own = _read_head(study_dir / HEAD_NAME)
    good = [part for part in (own, _part(own, "before")) if part is not None]
    if own is not None and not any(_same(found, part) for part in good):
        sentences.append(_apart(found, own))
    other = _read_head(recorded) if recorded is not None else None
    if other is not None and not any(_same(other, part) for part in [found, *good]):
        sentences.append(_apart(found, other))
    return [sentence for sentence in dict.fromkeys(sentences) if sentence not in told]


def _apart(found: Mapping[str, Any], recorded: Mapping[str, Any]) -> str:
    return (
        f"history.tsv no longer agrees with what was recorded: recorded were {clean(recorded['lines'])} lines with the "
        f"head {clean(recorded['sha256'])[:12]}, there are {found['lines']} lines with the head {found['sha256'][:12]}."
    )


def _same(first: Mapping[str, Any], second: Mapping[str, Any]) -> bool:
    return (first["lines"], first["sha256"]) == (second["lines"], second["sha256"])


def _part(record: dict[str, Any] | None, name: str) -> dict[str, Any] | None:
    part = (record or {}).get(name)
    return part if isinstance(part, dict) and {"lines", "sha256"} <= part.keys() else None


def _read_head(path: Path) -> dict[str, Any] | None:
    try:
        found = json.loads(path.read_text(encoding="utf-8"))
    except (OSError, ValueError):
        return None
    return _part({"head": found}, "head")


# --- writing


def append(
    study_dir: Path, new: Iterable[Entry], *, date: str, recorded: Path | None = None, known: Iterable[str] = ()
) -> dict[str, Any]:
    """Add lines to the history, whole or not at all; findings that it was changed by another hand come first.

    Parameters
    ----------
    study_dir
        The study folder.
    new
        The lines.
    date
        Their day.
    recorded
        A record among the results that holds the number of lines and the last hash, if there is one.
    known
        Findings from before the run began, when that record was still there.

    Returns
    -------
    dict
        `lines` and `sha256` of the history as it now is.
    """
    path = study_dir / HISTORY_NAME
    lines = _lines(path)
    before = _head_of(lines)
    told = set(told_disagreements(study_dir))
    found = [*known, *_new_disagreements(study_dir, recorded)]
    expected = _read_head(study_dir / HEAD_NAME) or {"lines": "", "sha256": ""}
    lost = [
        Entry(HISTORY_NAME, DISAGREEMENT, _short(expected), _short(before), sentence)
        for sentence in dict.fromkeys(found)
        if sentence not in told
    ]
    # The first new line binds to the last one that is there, whoever wrote it: the finding says what is amiss.
    chain = before["sha256"]
    for entry in [*lost, *new]:
        cells = [date, entry.item, entry.what, entry.old, entry.new, entry.reason]
        lines.append("\t".join([*(guarded(clean(cell)) for cell in cells), chain]))
        chain = _sha256(lines[-1])
    after = _head_of(lines)
    if not _same(before, after):
        # Both heads are good until the file is in place, so that a kill between the two is no finding.
        write_text(study_dir / HEAD_NAME, json.dumps({**after, "before": before}) + "\n")
        write_text(path, "\n".join([_HEADER, *lines]) + "\n")
    write_text(study_dir / HEAD_NAME, json.dumps(after) + "\n")
    return after


def _short(record: Mapping[str, Any]) -> str:
    return f"{record['lines']} lines, {str(record['sha256'])[:12]}" if record["sha256"] else ""
