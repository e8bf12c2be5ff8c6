"""The ledger follows bytes, not dates."""

import hashlib
import json
import os

import pytest

from evenblur.study import ledger as ledger_module
from evenblur.study.ledger import LEDGER_NAME, Ledger

LONG_AGO = 1_700_000_000 * 10**9


def put(path, text, date_ns=LONG_AGO):
    path.write_text(text)
    os.utime(path, ns=(date_ns, date_ns))


def sha(text):
    return hashlib.sha256(text.encode()).hexdigest()


@pytest.fixture
def hashings(monkeypatch):
    """Names of the files that were hashed."""
    seen = []
    original = ledger_module.image_sha256
    monkeypatch.setattr(ledger_module, "image_sha256", lambda path: (seen.append(path.name), original(path))[1])
    return seen


def look(study_dir, *names):
    ledger = Ledger(study_dir)
    found = [ledger.digest(name) for name in names]
    ledger.save()
    return found


def test_an_image_is_hashed_once_while_it_stays_the_same(tmp_path, hashings):
    put(tmp_path / "a.nii", "first")
    assert look(tmp_path, "a.nii") == look(tmp_path, "a.nii") == [sha("first")]
    assert hashings == ["a.nii"]


def test_a_touched_image_keeps_its_identity(tmp_path):
    put(tmp_path / "a.nii", "first")
    before = look(tmp_path, "a.nii")
    os.utime(tmp_path / "a.nii", ns=(LONG_AGO + 10**12, LONG_AGO + 10**12))
    assert look(tmp_path, "a.nii") == before


def test_a_replaced_image_of_the_same_size_and_an_older_date_is_noticed(tmp_path):
    put(tmp_path / "a.nii", "first")
    look(tmp_path, "a.nii")
    put(tmp_path / "a.nii", "other", LONG_AGO - 10**12)
    assert look(tmp_path, "a.nii") == [sha("other")]


def test_a_missing_image_is_an_identity_of_its_own_and_may_come_back(tmp_path):
    assert look(tmp_path, "a.nii") == ["missing"]
    put(tmp_path / "a.nii", "first")
    assert look(tmp_path, "a.nii") == [sha("first")]
    (tmp_path / "a.nii").unlink()
    assert look(tmp_path, "a.nii") == ["missing"]


def test_a_file_that_was_just_written_is_hashed_again(tmp_path, hashings):
    (tmp_path / "a.nii").write_text("first")
    look(tmp_path, "a.nii")
    look(tmp_path, "a.nii")
    assert hashings == ["a.nii", "a.nii"]


def test_a_folder_counts_with_all_its_files_and_names(tmp_path):
    folder = tmp_path / "series"
    folder.mkdir()
    put(folder / "1", "one")
    put(folder / "2", "two")
    first = look(tmp_path, "series")
    assert first == look(tmp_path, "series")
    (folder / "2").rename(folder / "3")
    renamed = look(tmp_path, "series")
    assert renamed != first
    put(folder / "3", "TWO", LONG_AGO - 10**12)
    assert look(tmp_path, "series") != renamed


def test_an_image_in_two_files_counts_with_both(tmp_path):
    put(tmp_path / "a.hdr", "header")
    put(tmp_path / "a.img", "voxels")
    put(tmp_path / "ab.img", "another image")
    first = look(tmp_path, "a.hdr", "a.img")
    assert first[0] == first[1] != sha("header")
    put(tmp_path / "ab.img", "changed")
    assert look(tmp_path, "a.hdr", "a.img") == first
    put(tmp_path / "a.img", "VOXELS", LONG_AGO - 10**12)
    assert look(tmp_path, "a.hdr", "a.img")[0] != first[0]


def test_a_damaged_ledger_costs_a_hashing_and_nothing_else(tmp_path, hashings):
    put(tmp_path / "a.nii", "first")
    look(tmp_path, "a.nii")
    (tmp_path / LEDGER_NAME).write_text("{ no json")
    assert look(tmp_path, "a.nii") == [sha("first")]
    assert hashings == ["a.nii", "a.nii"]


def test_paths_that_no_table_names_any_more_are_dropped(tmp_path):
    put(tmp_path / "a.nii", "first")
    put(tmp_path / "b.nii", "second")
    look(tmp_path, "a.nii", "b.nii")
    look(tmp_path, "b.nii")
    assert list(json.loads((tmp_path / LEDGER_NAME).read_text())) == ["b.nii"]


def test_jobs_of_a_run_see_the_ledger_as_the_run_began(tmp_path):
    put(tmp_path / "a.nii", "first")
    look(tmp_path, "a.nii")
    put(tmp_path / "a.nii", "changed")
    assert Ledger(tmp_path, look=False).digest("a.nii") == sha("first")
