"""Moving withdrawn results aside: nothing overwritten, nothing lost, no stranger touched."""

import errno
import json
import os
import socket

import pytest

from evenblur.errors import InputError
from evenblur.study import orphans
from evenblur.study.drafts import clear_drafts
from evenblur.study.history import entries, verify
from evenblur.study.provenance import PROVENANCE, keep_provenance
from evenblur.study.reading import load_study
from evenblur.study.tidying import tidy

STRAY = "results/harmonised/sub-q02/ses-base/pet/sub-q02_ses-base_desc-harmonised_pet.nii.gz"
OTHERS = [
    "results/intake/scans/sub-q02_ses-base.json",
    "results/resolution/gone.json",
    "results/achieved/quay-1.p9.json",
    "results/matching/quay-1.p1.json",
    "results/site_effect/regions/sub-q02_ses-base.json",
]
KEPT = [
    "results/harmonised/dataset_description.json",
    "results/harmonised/sub-q01/ses-base/pet/sub-q01_ses-base_desc-harmonised_pet.nii.gz",
    "results/intake/scans/sub-q01_ses-base.json",
    "results/intake/phantoms/points.json",
    "results/resolution/points.json",
    "results/achieved/quay-1.p1.json",
    "results/site_effect/regions/sub-q01_ses-base.json",
    "results/site_effect/site_effect.json",
    "results/plan.html",
    "results/audit/report.html",
    "results/audit/sites/quay.html",
]
DAY = "2026-03-31"


def put(path, text="content"):
    path.parent.mkdir(parents=True, exist_ok=True)
    path.write_text(text)


@pytest.fixture
def study_dir(tmp_path):
    folder = tmp_path / "study"
    put(folder / "config/study.yaml", "study: {title: Invented}\n")
    put(folder / "config/setups.tsv", "setup\tsite\nquay-1\tquay\n")
    columns = "phantom\tsetup\tphantom_session\tacquired\tkind\timage"
    put(folder / "config/phantoms.tsv", f"{columns}\npoints\tquay-1\tp1\t2026-01-01\tpoint_source\tp.nii\n")
    scans = "subject\tsession\tsetup\tacquired\timage\nq01\tbase\tquay-1\t2026-02-01\ts.nii\n"
    put(folder / "config/scans.tsv", scans)
    put(folder / "config/regions.tsv", "region\tcentre_mm\tdiameter_mm\nball\t55;55;50\t20\n")
    plan = {
        "periods": [
            {
                "setup": "quay-1",
                "phantom_session": "p1",
                "status": "smooth",
                "source_phantoms": {"in_plane": ["points"], "axial": ["points"]},
            }
        ],
        "scans": [
            {"entities": "sub-q01_ses-base", "status": "accepted"},
            {"entities": "sub-q02_ses-base", "status": "accepted"},
        ],
    }
    put(folder / "results/plan.json", json.dumps(plan))
    for name in [STRAY, *OTHERS, *KEPT]:
        put(folder / name, name)
    return folder


def call(study_dir, **settings):
    return tidy(study_dir, load_study(study_dir), date=DAY, **settings)


def files(study_dir):
    return {p.relative_to(study_dir).as_posix() for p in study_dir.rglob("*") if p.is_file()}


def test_what_no_row_stands_for_moves_and_all_else_stays(study_dir):
    before = files(study_dir)
    moved = call(study_dir)
    assert moved == {name: f"withdrawn/{name}" for name in sorted([STRAY, *OTHERS])}
    assert files(study_dir) >= before - moved.keys() | set(moved.values())
    assert all((study_dir / place).read_text() == name for name, place in moved.items())
    assert not (study_dir / "results/harmonised/sub-q02").exists()
    found = entries(study_dir / "history.tsv")
    assert [(day, entry.what, entry.old, entry.new) for day, entry in found] == [
        (DAY, "withdrawn", name, place) for name, place in moved.items()
    ]
    assert verify(study_dir / "history.tsv") == []
    assert call(study_dir) == {}
    assert not (study_dir / ".evenblur/lock").exists()


def test_without_a_table_of_regions_no_row_stands_for_their_records(study_dir):
    (study_dir / "config/regions.tsv").unlink()
    moved = call(study_dir)
    kept = "results/site_effect/regions/sub-q01_ses-base.json"
    assert moved.keys() == {STRAY, *OTHERS, kept}


def test_a_dry_run_changes_nothing(study_dir):
    before = files(study_dir)
    assert STRAY in call(study_dir, dry_run=True)
    assert files(study_dir) == before


def test_nothing_is_overwritten(study_dir):
    put(study_dir / "withdrawn" / STRAY, "an earlier withdrawal")
    moved = call(study_dir)
    assert moved[STRAY] == "withdrawn/" + STRAY.replace("_pet.nii.gz", "_pet~2.nii.gz")
    assert (study_dir / "withdrawn" / STRAY).read_text() == "an earlier withdrawal"
    assert (study_dir / moved[STRAY]).read_text() == STRAY


def test_a_running_workflow_is_left_alone(study_dir):
    held = {"host": "another-" + socket.gethostname(), "process_id": 1, "started": "1"}
    put(study_dir / ".evenblur/lock", json.dumps(held))
    before = files(study_dir)
    with pytest.raises(InputError, match="a run works on this study"):
        call(study_dir)
    assert files(study_dir) == before


def other_file_system(monkeypatch):
    def refuse(self, target):
        raise OSError(errno.EXDEV, "Invalid cross-device link")

    monkeypatch.setattr(orphans.Path, "rename", refuse)


def test_another_file_system_gets_a_copy_before_the_file_goes(study_dir, monkeypatch):
    other_file_system(monkeypatch)
    moved = call(study_dir)
    assert all((study_dir / place).read_text() == name for name, place in moved.items())
    assert not any((study_dir / name).exists() for name in moved)


@pytest.mark.parametrize("moment", ["before the copy is whole", "before the source goes"])
def test_a_kill_between_copy_and_removal_is_mended_by_the_next_call(study_dir, monkeypatch, moment):
    other_file_system(monkeypatch)

    class KilledError(Exception):
        pass

    def killed(*_arguments, **_settings):
        raise KilledError

    with monkeypatch.context() as patch:
        name, owner = ("fsync", orphans.os) if moment.endswith("whole") else ("unlink", orphans.Path)
        patch.setattr(owner, name, killed)
        with pytest.raises(KilledError):
            orphans.move_aside(study_dir / STRAY, study_dir / "withdrawn" / STRAY)
    assert (study_dir / STRAY).read_text() == STRAY
    moved = call(study_dir)
    assert moved[STRAY] == f"withdrawn/{STRAY}"
    assert (study_dir / moved[STRAY]).read_text() == STRAY
    assert not (study_dir / STRAY).exists()
    assert not [name for name in files(study_dir) if name.endswith(".part")]


def test_drafts_of_killed_jobs_are_cleared_and_nothing_else(tmp_path):
    keep = [
        "results/a.json",
        "results/.bidsignore",
        "results/notes.part",
        f".evenblur/.digests.json.{os.getpid()}.part",
    ]
    gone = ["results/.a.json.123.part", "results/x/.b.nii.gz.9.part", ".evenblur/.digests.json.4194999.part"]
    for name in [*keep, *gone]:
        put(tmp_path / name)
    assert clear_drafts(tmp_path, "results") == sorted(gone)
    assert files(tmp_path) == set(keep)


def test_results_without_records_get_a_newer_guard_and_others_do_not(tmp_path):
    assert keep_provenance(tmp_path, "results") is False
    guard = tmp_path / PROVENANCE
    os.utime(guard, (1, 1))
    assert keep_provenance(tmp_path, "results") is False  # nothing was made yet
    assert guard.stat().st_mtime == 1
    put(tmp_path / "results/plan.json")
    put(tmp_path / ".snakemake/metadata/one")
    assert keep_provenance(tmp_path, "results") is False
    assert guard.stat().st_mtime == 1
    (tmp_path / ".snakemake/metadata/one").unlink()
    assert keep_provenance(tmp_path, "results") is True
    assert guard.stat().st_mtime > (tmp_path / "results/plan.json").stat().st_mtime - 1
