"""The change log's chain: a line removed, added, changed or swapped is found, the last one too."""

import hashlib
import json
from types import SimpleNamespace

import pytest

from evenblur.check.auditing import check_handover
from evenblur.check.findings import DisagreementError, same_number, same_text
from evenblur.check.views import check_history, told_alterations

HEADER = "date\titem\twhat\told\tnew\treason\tprevious_sha256"


def sha256(text):
    return hashlib.sha256(text.encode()).hexdigest()


def chained(changes):
    """Lines of a history, each with the hash of the line before it, the first with the header's."""
    lines = [HEADER]
    for change in changes:
        lines.append("\t".join([*change, sha256(lines[-1])]))
    return lines


CHANGES = [
    ["2026-01-31", "target", "in_plane_mm", "8.0", "8.1", "agreed"],
    ["2026-02-01", "phantom quay-p1", "sha256", "", "0f", ""],
    ["2026-02-01", "scan sub-q01", "added", "", "{}", "ünlike"],
]


@pytest.fixture
def bag(tmp_path):
    (tmp_path / "results/audit").mkdir(parents=True)
    write(tmp_path, chained(CHANGES))
    head = {"lines": len(CHANGES), "sha256": sha256(chained(CHANGES)[-1])}
    (tmp_path / "results/audit/history.json").write_text(json.dumps(head))
    (tmp_path / "results/audit/audit.json").write_text(json.dumps({"history": head}))
    return SimpleNamespace(data=tmp_path)


def write(folder, lines):
    (folder / "history.tsv").write_text("\n".join(lines) + "\n")


def test_a_whole_history_checks_out(bag):
    assert check_history(bag) == len(CHANGES)


@pytest.mark.parametrize("number", range(1, len(CHANGES) + 1))
def test_any_removed_or_changed_line_is_found(bag, number):
    lines = chained(CHANGES)
    write(bag.data, lines[:number] + lines[number + 1 :])
    with pytest.raises(DisagreementError, match=r"history\.tsv"):
        check_history(bag)
    write(bag.data, [*lines[:number], lines[number].replace("2026", "2025"), *lines[number + 1 :]])
    with pytest.raises(DisagreementError, match=r"history\.tsv"):
        check_history(bag)


def test_a_removed_last_line_is_found_where_only_the_count_can_tell(bag):
    write(bag.data, chained(CHANGES[:-1]))
    with pytest.raises(DisagreementError, match="has 2 lines"):
        check_history(bag)


@pytest.mark.parametrize(
    "changes",
    [CHANGES[:-1], CHANGES[1:], [*CHANGES, CHANGES[0]], CHANGES[::-1], []],
    ids=["one less", "the first gone", "one more", "another order", "none left"],
)
def test_a_history_chained_anew_is_found_by_its_end(bag, changes):
    write(bag.data, chained(changes))
    with pytest.raises(DisagreementError):
        check_history(bag)


def test_what_a_run_found_altered_is_told(bag):
    assert told_alterations(bag) == 0
    found = ["2026-02-03", "history.tsv", "disagreement", "3 lines, 0f", "2 lines, 1e", "no longer agrees"]
    write(bag.data, chained([*CHANGES, found]))
    assert told_alterations(bag) == 1


def test_a_history_that_was_taken_away_is_found(bag):
    (bag.data / "history.tsv").unlink()
    with pytest.raises(DisagreementError, match="is not in the bag"):
        check_history(bag)


def test_a_half_line_at_the_end_is_found(bag):
    text = (bag.data / "history.tsv").read_text()
    (bag.data / "history.tsv").write_text(text.removesuffix("\n"))
    with pytest.raises(DisagreementError):
        check_history(bag)


@pytest.mark.parametrize(
    ("found", "expected"),
    [("1.2346", None), ("", 1.0), ("1.23457", 1.23457), ("1,5", 1.5), ("nan", 1.0), ("1.2347", 1.23461), (True, 1.0)],
)
def test_numbers_are_right_to_their_last_decimal_or_not_at_all(found, expected):
    with pytest.raises(DisagreementError):
        same_number("a cell", found, expected)


def test_a_tie_may_be_rounded_either_way():
    for text in ("1.2345", "1.2346"):
        same_number("a cell", text, 1.23455)
    same_text("a cell", None, "")


def test_what_a_strangers_bag_makes_the_check_say_is_printable(tmp_path):
    lines = []
    for name in ("bagit.txt", "bag-info.txt", "manifest-sha256.txt", "tagmanifest-sha256.txt"):
        (tmp_path / name).write_text("")
    (tmp_path / "bagit.txt").write_text("BagIt-Version: 1.0\nTag-File-Character-Encoding: UTF-8\n")
    (tmp_path / "\x1b[2J\u202e\n").write_text("x")
    assert not check_handover(tmp_path, say=lines.append)
    assert "no manifest lists it" in lines[-1]
    assert all(line.isprintable() for line in lines)
