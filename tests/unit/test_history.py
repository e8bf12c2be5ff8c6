"""The change log: what is appended, what is noticed, what it folds to."""

import hashlib
import json

import pytest

from evenblur.errors import InputError
from evenblur.study.history import (
    COLUMNS,
    HEAD_NAME,
    HISTORY_NAME,
    Entry,
    append,
    differences,
    disagreements,
    entries,
    fold,
    head,
    today,
    verify,
)

FIRST = {"target": {"in_plane_mm": "8.0"}, "scan a": {"status": "accepted", "input_sha256": "12"}}


def record(study_dir, state, date="2026-01-01", reasons=None):
    """Bring the history up to a state, as a run does."""
    old = fold(entries(study_dir / HISTORY_NAME))
    return append(study_dir, differences(old, state, reasons=reasons), date=date)


def test_each_line_carries_the_hash_of_the_line_before(tmp_path):
    record(tmp_path, FIRST)
    header, *lines = (tmp_path / HISTORY_NAME).read_bytes().decode().splitlines()
    assert header == "date\titem\twhat\told\tnew\treason\tprevious_sha256" == "\t".join(COLUMNS)
    before = header
    for line in lines:
        # computed here by the standard library from the bytes, as an auditor would
        assert line.split("\t")[-1] == hashlib.sha256(before.encode()).hexdigest()
        before = line
    assert head(tmp_path / HISTORY_NAME) == {"lines": 2, "sha256": hashlib.sha256(before.encode()).hexdigest()}
    assert verify(tmp_path / HISTORY_NAME) == []


def test_lines_fold_to_the_state_that_was_recorded_last(tmp_path):
    states = [
        FIRST,
        {"target": {"in_plane_mm": "8.1"}, "scan a": {"status": "held", "reasons": "image_missing"}},
        {"target": {"in_plane_mm": "8.1"}, "scan b": {"status": "accepted"}},
        {**FIRST, "scan b": {"note added": "removed"}},
    ]
    for state in states:
        record(tmp_path, state)
        assert fold(entries(tmp_path / HISTORY_NAME)) == state


def test_nothing_changed_leaves_the_bytes_alone(tmp_path):
    record(tmp_path, FIRST)
    before = (tmp_path / HISTORY_NAME).read_bytes()
    record(tmp_path, FIRST, date="2027-01-01")
    assert (tmp_path / HISTORY_NAME).read_bytes() == before


def test_a_change_is_one_line_with_old_new_and_reason(tmp_path):
    record(tmp_path, FIRST)
    moved = {**FIRST, "target": {"in_plane_mm": "8.2"}}
    record(tmp_path, moved, date="2026-02-01", reasons={"target": "board, 3 May", "scan a": "not this"})
    assert entries(tmp_path / HISTORY_NAME, after=2) == [
        ("2026-02-01", Entry("target", "in_plane_mm", "8.0", "8.2", "board, 3 May"))
    ]


def test_tabs_and_line_breaks_of_a_note_cannot_make_columns_or_lines(tmp_path):
    append(tmp_path, [Entry("scan a", "note x", "", "one\ttwo\nthree\r\x1b[31m", "why\tnot")], date="2026-01-01")
    assert verify(tmp_path / HISTORY_NAME) == []
    assert [e.new for _, e in entries(tmp_path / HISTORY_NAME)] == ["one two three [31m"]


def lines_of(study_dir):
    return (study_dir / HISTORY_NAME).read_text().splitlines(keepends=True)


def put(study_dir, lines):
    (study_dir / HISTORY_NAME).write_text("".join(lines))


THREE = {**FIRST, "scan b": {"status": "accepted"}}
EDITS = {
    "last line gone": lambda lines: lines[:-1],
    "line in the middle gone": lambda lines: [*lines[:2], *lines[3:]],
    "a digit": lambda lines: [line.replace("8.0", "8.3") for line in lines],
    "date of the last line": lambda lines: [*lines[:-1], lines[-1].replace("2026-01-01", "2025-01-01")],
    "lines swapped": lambda lines: [lines[0], lines[2], lines[1], *lines[3:]],
    "a line added": lambda lines: [*lines, lines[-1]],
    "header gone": lambda lines: lines[1:],
    "line ends of another system": lambda lines: [line.replace("\n", "\r\n") for line in lines],
    "everything gone": lambda lines: [],
    "a column more": lambda lines: [*lines[:-1], lines[-1].replace("\n", "\tx\n")],
}


@pytest.mark.parametrize("edit", EDITS)
def test_an_edit_is_noticed_written_down_once_and_does_not_stop_the_log(tmp_path, edit):
    record(tmp_path, THREE)
    assert disagreements(tmp_path) == []
    put(tmp_path, EDITS[edit](lines_of(tmp_path)))
    found = disagreements(tmp_path)
    assert found
    assert all(sentence.startswith("history.tsv") and "\n" not in sentence for sentence in found)
    record(tmp_path, THREE, date="2026-02-01")
    told = [entry for _, entry in entries(tmp_path / HISTORY_NAME) if entry.what == "disagreement"]
    assert sorted(entry.reason for entry in told) == found
    # afterwards the list is the same: no run finds it anew
    assert disagreements(tmp_path) == found
    assert fold(entries(tmp_path / HISTORY_NAME)) == THREE
    record(tmp_path, THREE, date="2026-03-01")
    assert disagreements(tmp_path) == found


def test_the_head_among_the_results_is_enough_to_notice_a_removed_last_line(tmp_path):
    audit = tmp_path / "history.json"
    audit.write_text(json.dumps(record(tmp_path, THREE)))
    (tmp_path / HEAD_NAME).unlink()
    assert disagreements(tmp_path, audit) == []
    put(tmp_path, lines_of(tmp_path)[:-1])
    assert disagreements(tmp_path) == []
    assert len(disagreements(tmp_path, audit)) == 1


def test_a_kill_between_announcing_and_writing_is_no_edit(tmp_path, monkeypatch):
    record(tmp_path, FIRST)
    before = (tmp_path / HISTORY_NAME).read_bytes()

    class KilledError(Exception):
        pass

    from evenblur.study import history

    real = history.write_text

    def killed(path, text):
        if path.name == HISTORY_NAME:
            raise KilledError
        real(path, text)

    monkeypatch.setattr(history, "write_text", killed)
    with pytest.raises(KilledError):
        record(tmp_path, THREE)
    monkeypatch.undo()
    assert (tmp_path / HISTORY_NAME).read_bytes() == before
    assert disagreements(tmp_path) == []
    record(tmp_path, THREE)
    assert disagreements(tmp_path) == []
    # once it is in place, the head before is no longer good: taking the last lines out is an edit
    (tmp_path / HISTORY_NAME).write_bytes(before)
    assert len(disagreements(tmp_path)) == 1


def test_the_day_is_given_or_reproducible_or_of_the_clock_in_utc(monkeypatch):
    assert today("2026-03-31") == "2026-03-31"
    # 1774915200 = 20543 days of 86400 s; 20543 days after 1970-01-01 is 2026-03-31 (date -u -d @1774915200)
    monkeypatch.setenv("SOURCE_DATE_EPOCH", "1774915200")
    assert today() == "2026-03-31"
    monkeypatch.setenv("SOURCE_DATE_EPOCH", "1774915199")
    assert today() == "2026-03-30"
    monkeypatch.delenv("SOURCE_DATE_EPOCH")
    assert len(today()) == 10


@pytest.mark.parametrize("given", ["31.3.2026", "2026-13-01", "yesterday"])
def test_a_day_that_is_none_is_refused(given):
    with pytest.raises(InputError, match="is no date"):
        today(given)


def test_an_epoch_that_is_none_is_refused(monkeypatch):
    monkeypatch.setenv("SOURCE_DATE_EPOCH", "soon")
    with pytest.raises(InputError, match="SOURCE_DATE_EPOCH"):
        today()


@pytest.mark.parametrize("text", ["=1+1", "@SUM(A1)", "+cmd", "'=1", "'", "＝1+1", "-1+cmd", "-0.5", "plain"])
def test_no_cell_is_a_formula_and_every_text_comes_back(tmp_path, text):
    record(tmp_path, {"setup quay-1": {"scanner": "old"}})
    record(tmp_path, {"setup quay-1": {"scanner": text}}, reasons={"setup quay-1": text})
    assert fold(entries(tmp_path / HISTORY_NAME)) == {"setup quay-1": {"scanner": text}}
    cells = (tmp_path / HISTORY_NAME).read_text().splitlines()[-1].split("\t")
    kept = text in ("-0.5", "plain")
    assert cells[4] == cells[5] == (text if kept else f"'{text}")
    assert disagreements(tmp_path) == []
    assert record(tmp_path, {"setup quay-1": {"scanner": text}})["lines"] == 2


def test_what_an_altered_history_says_is_printable(tmp_path):
    record(tmp_path, FIRST)
    path = tmp_path / HISTORY_NAME
    path.write_text(path.read_text().replace("accepted", "\x1b[2Jx").replace("target", "\x1b]0;x\x07"))
    told = [part for _, entry in entries(path) for part in vars(entry).values()]
    assert all(part.isprintable() for part in [*told, *disagreements(tmp_path)])
