"""Only what changed runs again: the sets of jobs, foretold and done."""

import json
import os
import shutil
import subprocess

import numpy as np
import pytest

import small_study as small
from evenblur.images.digests import file_sha256
from small_study import (
    AUDIT,
    EFFECT,
    PACK,
    PICTURES,
    PLAN,
    PRICES,
    REPORT,
    dry_and_real,
    named,
    proved,
    smoothed,
    snakemake,
)

pytestmark = pytest.mark.slow


def take_in(*images):
    return {f"Take in images/{image}.nii.gz" for image in images}


def rest(jobs):
    return jobs - named(jobs, "Smooth sub-", "Smooth and measure", EFFECT)


def test_nothing_runs_where_nothing_changed_in_another_place(study):
    assert snakemake(study, "--dry-run").idle
    assert snakemake(study).idle


def test_nothing_runs_after_files_were_touched_or_copied(study, finished_study):
    for path in study.rglob("*"):
        if path.is_file() and ".snakemake" not in path.parts:
            os.utime(path)
    for image in (study / "images").iterdir():
        shutil.copy(finished_study / "images" / image.name, image)
    assert snakemake(study, "--dry-run").idle
    assert snakemake(study).idle


def test_nothing_runs_after_large_files_were_touched(study):
    # Snakemake compares contents up to 1 MB and of larger files the dates: an ordinary scan is larger.
    noise = np.random.default_rng(3).standard_normal((96, 96, 64)).astype(np.float32)
    small.save(study / "images" / "q01.nii.gz", 100 + noise)
    regions = [["ball", "55;55;50", "20"]]
    small.write_table(study / "config" / "regions.tsv", "region centre_mm diameter_mm", regions)
    assert snakemake(study).code == 0
    harmonised = study / "results/harmonised/sub-q01/ses-base/pet/sub-q01_ses-base_desc-harmonised_pet.nii.gz"
    assert harmonised.stat().st_size > 1_000_000
    os.utime(harmonised)
    assert snakemake(study, "--dry-run").idle
    assert snakemake(study).idle


def test_nothing_runs_after_the_studys_own_notes_are_lost(study):
    # Snakemake's records in .snakemake still say how each result was made; the images are looked at anew.
    (study / ".evenblur").rename(study / "lost")
    assert snakemake(study, "--dry-run").idle
    run = snakemake(study)
    assert run.idle
    assert "everything is made again" not in run.text
    digests = ".evenblur/digests.json"
    assert json.loads((study / digests).read_text()) == json.loads((study / "lost/digests.json").read_text())


def test_a_change_while_the_studys_own_notes_were_lost_is_seen(study):
    shutil.rmtree(study / ".evenblur")
    small.save(study / "images" / "q01.nii.gz", small.scan_volume("q01") + 1)
    _, real = dry_and_real(study)
    assert rest(real) == take_in("q01") | {PLAN} | AUDIT
    assert (smoothed(real), proved(real)) == ({"q01"}, set())


def test_nothing_runs_after_the_study_was_copied_with_new_dates_or_moved(study, tmp_path):
    subprocess.run(["cp", "-r", study, tmp_path / "copy"], check=True)
    assert snakemake(tmp_path / "copy", "--dry-run").idle
    assert snakemake(tmp_path / "copy").idle
    moved = (tmp_path / "copy").rename(tmp_path / "moved")
    assert snakemake(moved, "--dry-run").idle
    assert snakemake(moved).idle


def test_nothing_runs_with_the_program_cloned_anew_elsewhere(study, tmp_path):
    clone = small.copy_program(tmp_path / "another clone")
    assert snakemake(study, "--dry-run", program=clone).idle
    assert snakemake(study, program=clone).idle
    moved = clone.rename(tmp_path / "moved clone")
    assert snakemake(study, "--dry-run", program=moved).idle
    assert snakemake(study, program=moved).idle


def test_a_new_phantom_image_redoes_its_period_alone(study):
    small.save(study / "images" / "quay-1.nii.gz", small.phantom_volume("quay-1", widen=0.5))
    dry, real = dry_and_real(study)
    first = take_in("quay-1") | {"Measure phantom quay-1-points of setup quay-1", PLAN}
    assert first <= dry
    assert rest(real) == first | AUDIT
    assert (smoothed(real), proved(real)) == ({"q01", "q02"}, {"quay-1.p1"})
    assert EFFECT in real


def test_a_phantom_that_moves_the_target_redoes_every_scan_whose_kernel_changed(study):
    (study / "config" / "study.yaml").write_text(small.COARSEST)
    assert snakemake(study).code == 0
    small.save(study / "images" / "moor-1.nii.gz", small.phantom_volume("moor-1", widen=1.5))
    dry, real = dry_and_real(study)
    first = take_in("moor-1") | {"Measure phantom moor-1-points of setup moor-1", PLAN}
    assert first <= dry
    assert rest(real) == first | AUDIT
    assert smoothed(real) == set(small.SUBJECTS)
    assert proved(real) == {"quay-1.p1", "mill-1.p1", "moor-1.p1"}


def test_a_replaced_scan_of_the_same_size_and_an_older_date_is_smoothed_again_alone(study):
    path = study / "images" / "q01.nii.gz"
    other = bytearray(path.read_bytes())
    # The date inside the gzip header: other bytes, the same length, the same voxels.
    other[4:8] = b"\x01\x02\x03\x04"
    path.write_bytes(other)
    os.utime(path, (1_600_000_000, 1_600_000_000))
    dry, real = dry_and_real(study)
    first = take_in("q01") | {PLAN}
    assert first <= dry
    assert rest(real) == first | AUDIT
    assert (smoothed(real), proved(real)) == ({"q01"}, set())
    assert EFFECT not in real


def test_a_sidecar_that_comes_redoes_its_scan_alone(study):
    (study / "images" / "q02.json").write_text('{"Units": "Bq/mL", "ReconFilterSize": 5}')
    dry, real = dry_and_real(study)
    first = take_in("q02") | {PLAN}
    assert first <= dry
    assert rest(real) == first | AUDIT
    assert smoothed(real) == {"q02"}
    record = study / "results/harmonised/sub-q02/ses-base/pet/sub-q02_ses-base_desc-harmonised_pet.json"
    assert '"Units": "Bq/mL"' in record.read_text()


def test_an_image_gone_is_held_and_one_that_is_back_is_smoothed(study):
    path = study / "images" / "m02.nii.gz"
    aside = path.rename(study / "aside.nii.gz")
    dry, real = dry_and_real(study)
    first = take_in("m02") | {PLAN}
    assert first <= dry
    assert rest(real) == first | AUDIT
    assert smoothed(real) == proved(real) == set()
    assert "m02\tbase\tmill-1\tp1\theld\timage_missing" in (study / "results/audit/scans.tsv").read_text()
    aside.rename(path)
    dry, real = dry_and_real(study)
    first = take_in("m02") | {PLAN}
    assert first <= dry
    assert rest(real) == first | AUDIT
    assert smoothed(real) <= {"m02"}
    assert "m02\tbase\tmill-1\tp1\taccepted" in (study / "results/audit/scans.tsv").read_text()


def test_another_image_of_a_scan_that_stays_held_redoes_the_audit(study):
    path = study / "images" / "q01.nii.gz"
    hashes = []
    for shape in ((20, 20, 20), (20, 20, 21)):
        small.save(path, np.zeros(shape, np.float32))
        _, real = dry_and_real(study)
        assert rest(real) | {PICTURES} == take_in("q01") | {PLAN} | AUDIT
        assert smoothed(real) == set()
        row = next(line for line in (study / "results/audit/scans.tsv").read_text().splitlines() if "q01\t" in line)
        assert "\theld\t" in row
        hashes.append(file_sha256(path))
        assert hashes[-1] in row
        assert hashes[-1] in (study / "history.tsv").read_text()
    assert hashes[0] != hashes[1]


def test_lost_results_are_made_again_to_the_same_bytes(study):
    before = small.result_bytes(study)
    folder = "results/harmonised/sub-{0}/ses-base/pet/sub-{0}_ses-base_desc-harmonised_pet"
    lost = [folder.format("q01") + ".nii.gz", folder.format("m01") + ".json"]
    lost += ["results/intake/scans/sub-o01_ses-base.json", "results/handover/tagmanifest-sha256.txt"]
    for name in lost:
        (study / name).unlink()
    _, real = dry_and_real(study)
    assert smoothed(real) == {"q01", "m01"}
    assert small.result_bytes(study) == before


def test_an_image_lost_together_with_the_audit_is_made_again(study):
    before = small.result_bytes(study)
    (study / "results/harmonised/sub-q01/ses-base/pet/sub-q01_ses-base_desc-harmonised_pet.nii.gz").unlink()
    shutil.rmtree(study / "results/audit")
    _, real = dry_and_real(study)
    assert smoothed(real) == {"q01"}
    assert small.result_bytes(study) == before


def test_a_lost_intake_record_alone_is_made_again(study):
    before = small.result_bytes(study)
    (study / "results/intake/scans/sub-q01_ses-base.json").unlink()
    _, real = dry_and_real(study)
    assert real == take_in("q01") | {PLAN}
    assert small.result_bytes(study) == before


def test_a_missing_phantom_image_holds_its_scans_without_stopping_the_run(study):
    (study / "images" / "mill-1.nii.gz").unlink()
    dry, real = dry_and_real(study)
    first = take_in("mill-1") | {PLAN}
    assert first <= dry
    assert rest(real) == first | AUDIT
    assert smoothed(real) == proved(real) == set()
    rows = (study / "results/audit/scans.tsv").read_text()
    assert rows.count("unmeasured") == 2


def test_a_new_row_runs_its_own_steps(study):
    small.save(study / "images" / "q03.nii.gz", small.scan_volume("q03"))
    rows = [*small.scan_rows(), ["q03", "base", "quay-1", "2026-02-01", "images/q03.nii.gz"]]
    small.write_table(study / "config" / "scans.tsv", small.SCAN_COLUMNS, rows)
    dry, real = dry_and_real(study)
    first = take_in("q03") | {PLAN}
    assert first <= dry
    assert rest(real) == first | AUDIT
    assert (smoothed(real), proved(real)) == ({"q03"}, set())


def test_a_removed_row_makes_the_plan_and_the_audit_anew(study):
    rows = [row for row in small.scan_rows() if row[0] != "q02"]
    small.write_table(study / "config" / "scans.tsv", small.SCAN_COLUMNS, rows)
    dry, real = dry_and_real(study)
    assert PLAN in dry
    assert real == {PLAN} | AUDIT
    assert "not clean" in (study / "results/audit/report.html").read_text().lower()


@pytest.fixture
def clone(tmp_path):
    return small.copy_program(tmp_path / "clone")


def edit(path, old, new):
    text = path.read_text()
    assert old in text
    path.write_text(text.replace(old, new, 1))


def test_wording_of_the_report_redoes_the_report_alone(study, clone):
    page = clone / "workflow" / "report" / "report.html.j2"
    page.write_text(page.read_text() + "<!-- other words -->\n")
    dry, real = dry_and_real(study, program=clone)
    assert dry == real == {REPORT, PACK}


def test_code_that_changes_smoothed_values_redoes_all_scans(study, clone):
    smoothing = clone / "scripts" / "evenblur" / "smoothing.py"
    smoothing.write_text(smoothing.read_text() + "\nA_NEW_CONSTANT = 1\n")
    dry, real = dry_and_real(study, program=clone)
    assert smoothed(dry) == smoothed(real) == set(small.SUBJECTS)
    assert proved(real) == {"quay-1.p1", "mill-1.p1", "moor-1.p1"}
    assert rest(real) == AUDIT - {PRICES}


def test_docstrings_and_comments_redo_nothing(study, clone):
    for path in (clone / "scripts").rglob("*.py"):
        text = path.read_text()
        if text.startswith('"""') and path.name != "start.py":
            path.write_text("# a comment\n" + text.replace('"""', '"""Other words. ', 1))
    assert snakemake(study, "--dry-run", program=clone).idle
    assert snakemake(study, program=clone).idle


EVERYTHING_FROM_IMAGES = {
    *(f"Take in images/{image}.nii.gz" for image in [*small.WIDTHS, *small.SUBJECTS]),
    *(f"Measure phantom {setup}-points of setup {setup}" for setup in small.WIDTHS),
}


@pytest.mark.parametrize("hidden", [[".snakemake"], [".snakemake", ".evenblur"]])
def test_results_whose_records_are_lost_are_made_again_to_the_same_bytes(study, finished_study, hidden):
    for folder in hidden:
        shutil.rmtree(study / folder)
    dry, real = snakemake(study, "--dry-run"), snakemake(study)
    assert EVERYTHING_FROM_IMAGES | {PLAN} <= dry.jobs
    assert "everything is made again" in dry.text
    assert "everything is made again" in real.text
    assert EVERYTHING_FROM_IMAGES | {PLAN} | AUDIT <= real.jobs
    assert smoothed(real.jobs) == set(small.SUBJECTS)
    assert proved(real.jobs) == {"quay-1.p1", "mill-1.p1", "moor-1.p1"}
    assert small.result_bytes(study) == small.result_bytes(finished_study)
    assert (study / "history.tsv").read_bytes() == (finished_study / "history.tsv").read_bytes()
    assert snakemake(study).idle


def test_a_phantom_that_changed_while_the_records_were_lost_is_not_taken_for_current(study):
    shutil.rmtree(study / ".snakemake")
    small.save(study / "images" / "quay-1.nii.gz", small.phantom_volume("quay-1", widen=0.5))
    before = (study / "results/resolution/quay-1-points.json").read_bytes()
    assert snakemake(study).code == 0
    assert (study / "results/resolution/quay-1-points.json").read_bytes() != before
    small.save(study / "images" / "quay-1.nii.gz", small.phantom_volume("quay-1"))
    assert snakemake(study).code == 0
    assert (study / "results/resolution/quay-1-points.json").read_bytes() == before


def test_other_pins_redo_nothing_and_the_audit_tells_mixed_versions(study):
    record = study / "results/harmonised/sub-q01/ses-base/pet/sub-q01_ses-base_desc-harmonised_pet.json"
    content = json.loads(record.read_text())
    content["Evenblur"]["versions"]["numpy"] = "1.0.0"
    record.write_text(json.dumps(content, indent=2) + "\n")
    (study / "results/audit/sites.tsv").unlink()
    dry, real = dry_and_real(study)
    assert smoothed(real) == smoothed(dry) == proved(real) == set()
    assert rest(real) <= AUDIT
    assert "mixed_versions" in (study / "results/audit/queries.tsv").read_text()
