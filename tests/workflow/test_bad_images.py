"""Many kinds of bad input in one study: each ends with its code, nothing stops, and the good scans do not notice."""

import csv

import pytest

import bad_images as bad
import small_study as small
from evenblur.codes import HOLDS

pytestmark = pytest.mark.slow


def table(study_dir, name):
    with (study_dir / "results/audit" / name).open(newline="", encoding="utf-8") as stream:
        return list(csv.DictReader(stream, delimiter="\t"))


def harmonised(study_dir, subjects):
    """Bytes of the harmonised images and records of some subjects, by name."""
    root = study_dir / "results/harmonised"
    files = [path for subject in subjects for path in (root / f"sub-{subject}").rglob("*") if path.is_file()]
    return {path.name: path.read_bytes() for path in files}


@pytest.fixture(scope="module")
def bad_run(tmp_path_factory):
    study_dir = small.make_study(tmp_path_factory.mktemp("bad") / "study")
    bad.add_setups(study_dir)
    rows = bad.good_rows() + bad.add(study_dir, {**bad.CASES, **bad.ODD})
    small.write_table(study_dir / "config" / "scans.tsv", bad.SCAN_COLUMNS, rows)
    return study_dir, small.snakemake(study_dir)


def test_no_bad_image_stops_the_run(bad_run):
    _, run = bad_run
    assert run.code == 0, run.text
    assert "Traceback" not in run.text


def test_there_are_more_than_thirty_kinds_and_every_hold_reason_is_among_them():
    reasons = {reason for case in bad.CASES.values() for reason in case.reasons}
    assert len(bad.CASES) >= 30
    assert reasons == set(HOLDS)


@pytest.mark.parametrize("subject", [*bad.CASES, *bad.ODD])
def test_each_bad_image_ends_with_its_code(bad_run, subject):
    study_dir, _ = bad_run
    case = {**bad.CASES, **bad.ODD}[subject]
    row = next(row for row in table(study_dir, "scans.tsv") if row["subject"] == subject)
    assert row["reasons"] == ";".join(case.reasons)
    assert row["status"] == ("held" if case.reasons else "accepted")
    assert set(case.flags) <= set(row["flags"].split(";"))


@pytest.mark.parametrize("subject", list(bad.CASES))
def test_every_held_scan_has_its_line_among_the_queries(bad_run, subject):
    study_dir, _ = bad_run
    asked = [row for row in table(study_dir, "queries.tsv") if row["item"] == f"sub-{subject}_ses-base"]
    assert set(bad.CASES[subject].reasons) <= {row["code"] for row in asked}
    assert all(row["sentence"].endswith(".") for row in asked)


def test_the_good_scans_do_not_notice(bad_run, finished_study):
    study_dir, _ = bad_run
    expected = harmonised(finished_study, small.SUBJECTS)
    assert len(expected) == 2 * len(small.SUBJECTS)
    assert harmonised(study_dir, small.SUBJECTS) == expected


def test_a_phantom_that_cannot_be_used_is_asked_about(bad_run):
    study_dir, _ = bad_run
    assert ("fen-2-points", "image_unreadable") in {
        (row["item"], row["code"]) for row in table(study_dir, "queries.tsv")
    }


def test_check_says_by_site_what_to_mend(bad_run):
    study_dir, _ = bad_run
    run = small.snakemake(study_dir, "check")
    assert run.code == 0, run.text
    assert "Site mill: nothing to mend" in run.text
    assert "Site fen:" in run.text
    for subject, case in bad.CASES.items():
        # What needs a measured width, or the kernel, is the plan's to say.
        if set(case.reasons) & {"unmeasured", "coarser_than_target", "under_sampled", "oblique_grid", "too_few_slices"}:
            continue
        if "excluded_by_decision" in case.reasons:
            assert f"out of use by decision: sub-{subject}_ses-base" in run.text
        else:
            assert f"scan sub-{subject}_ses-base" in run.text
    scans = len(small.SUBJECTS) + len(bad.CASES) + len(bad.ODD)
    assert f"of {scans} can be used" in run.text


BAD_OF_TEN = ("cutgzip", "copied", "otherfilter")
NEW = (("q03", "quay-1"), ("m03", "mill-1"))


def test_three_bad_scans_of_ten_change_no_byte_of_the_seven_good_ones(tmp_path):
    clean = small.make_study(tmp_path / "clean")
    for subject in ("q03", "m03"):
        small.save(clean / "images" / f"{subject}.nii.gz", small.scan_volume(subject))
    good = [*bad.good_rows(), *([s, "base", setup, "2026-02-01", f"images/{s}.nii.gz", *[""] * 4] for s, setup in NEW)]
    small.write_table(clean / "config" / "scans.tsv", bad.SCAN_COLUMNS, good)
    mixed = bad.copy_study(clean, tmp_path / "mixed")
    for setup in small.WIDTHS:
        for study_dir in (clean, mixed):
            (study_dir / "images" / f"{setup}.json").write_text(bad.json.dumps(bad.RECONSTRUCTION))
    rows = bad.add(mixed, {subject: bad.CASES[subject] for subject in BAD_OF_TEN})
    small.write_table(mixed / "config" / "scans.tsv", bad.SCAN_COLUMNS, [*good[:2], *rows, *good[2:]])
    for study_dir in (clean, mixed):
        run = small.snakemake(study_dir)
        assert run.code == 0, run.text
    subjects = [row[0] for row in good]
    assert len(subjects) == 7
    expected = harmonised(clean, subjects)
    assert len(expected) == 14
    assert harmonised(mixed, subjects) == expected
    held = {row["subject"] for row in table(mixed, "scans.tsv") if row["status"] == "held"}
    assert held == set(BAD_OF_TEN)
    assert not [path for s in held for path in (mixed / "results/harmonised").rglob(f"*sub-{s}*")]
    for name in ("achieved", "resolution"):
        for path in (clean / "results" / name).iterdir():
            assert (mixed / "results" / name / path.name).read_bytes() == path.read_bytes(), path.name


def test_a_harmonised_image_that_comes_back_under_another_header_is_held(study):
    done = study / "results/harmonised/sub-q01/ses-base/pet/sub-q01_ses-base_desc-harmonised_pet.nii.gz"
    image = bad.nib.load(done)
    bad.plain(study / "images" / "back.nii", image.get_fdata())
    rows = [*small.scan_rows(), ["back", "base", "quay-1", "2026-02-01", "images/back.nii"]]
    small.write_table(study / "config" / "scans.tsv", small.SCAN_COLUMNS, rows)
    run = small.snakemake(study)
    assert run.code == 0, run.text
    row = next(row for row in table(study, "scans.tsv") if row["subject"] == "back")
    assert (row["status"], row["reasons"]) == ("held", "already_harmonised")
    assert small.snakemake(study).idle


def test_a_study_without_scans_measures_and_plans_its_phantoms(study):
    small.write_table(study / "config" / "scans.tsv", small.SCAN_COLUMNS, [])
    check = small.snakemake(study, "check")
    assert check.code == 0, check.text
    assert "the table has no rows" in check.text
    run = small.snakemake(study)
    assert run.code == 0, run.text
    assert table(study, "scans.tsv") == []
    assert [row["verdict"] for row in table(study, "sites.tsv")] == ["pass"] * 3
