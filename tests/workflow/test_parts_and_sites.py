"""Submissions that carry many scans, and runs about single sites: the same results, and still only what changed."""

import pytest

import small_study as small

pytestmark = pytest.mark.slow

PARTS = ("--config", "scans_per_submission=2")
PLAN = "Make the plan: target, kernels, accepted and held scans"
PRICES = "Price the targets"
AUDIT = {
    "Draw a few scans of each site before and after smoothing",
    "Record what changed",
    "Write the audit tables",
    "Write the report",
    "Pack the bag for the auditor",
}


def gathered(jobs):
    return {job for job in jobs if job.startswith("Gather")}


def smoothed(jobs):
    return {job.split("sub-")[1].split("_")[0] for job in jobs if job.startswith("Smooth sub-")}


def run(study_dir, *arguments):
    done = small.snakemake(study_dir, *arguments)
    assert done.code == 0, done.text
    return done


@pytest.fixture(scope="module")
def finished_in_parts(tmp_path_factory):
    study_dir = small.make_study(tmp_path_factory.mktemp("parts") / "study")
    return study_dir, run(study_dir, *PARTS)


def test_parts_change_no_result_and_leave_nothing_to_do(finished_in_parts, finished_study):
    study_dir, first = finished_in_parts
    # Five scans and three phantoms, two at most a part; one part for each period.
    assert len([job for job in gathered(first.jobs) if "intake" in job]) >= 5
    assert len([job for job in gathered(first.jobs) if "intake" not in job]) == 3
    assert small.result_bytes(study_dir) == small.result_bytes(finished_study)
    assert small.snakemake(study_dir, *PARTS).idle
    assert small.snakemake(study_dir).idle


def test_a_changed_scan_redoes_its_own_parts(finished_in_parts, tmp_path):
    study_dir, _ = finished_in_parts
    small.save(study_dir / "images" / "q01.nii.gz", small.scan_volume("q01") + 1)
    jobs = run(study_dir, *PARTS).jobs
    assert smoothed(jobs) == {"q01"}
    parts = gathered(jobs)
    assert len(parts) == 2
    assert any("quay-1.p1" in job for job in parts)
    rest = {job for job in jobs if job not in parts and not job.startswith("Smooth sub-")}
    assert rest == {"Take in images/q01.nii.gz", PLAN, PRICES} | AUDIT
    assert small.snakemake(study_dir, *PARTS).idle
    assert small.snakemake(study_dir).idle


def test_a_site_is_smoothed_alone_after_the_plan_and_the_whole_ends_alike(finished_study, tmp_path):
    study_dir = small.make_study(tmp_path / "study")
    run(study_dir, "plan")
    jobs = run(study_dir, "--config", "site=quay").jobs
    assert smoothed(jobs) == {"q01", "q02"}
    assert {job for job in jobs if "again" in job} == {"Smooth and measure again the phantoms of quay-1.p1"}
    assert len(jobs) == 3
    assert small.snakemake(study_dir, "--config", "site=quay").idle
    both = run(study_dir, "harmonise", "--config", "site=mill,moor", "scans_per_submission=20").jobs
    assert smoothed(both) == {"m01", "m02", "o01"}
    assert len(gathered(both)) == 2
    rest = run(study_dir).jobs
    assert rest == {"Describe the harmonised data set", "Compare the sites before and after"} | AUDIT
    assert small.result_bytes(study_dir) == small.result_bytes(finished_study)


def test_a_site_without_a_plan_of_its_present_scans_is_refused_in_one_line(study):
    image = study / "images" / "q01.nii.gz"
    small.save(image, small.scan_volume("q01") + 1)
    changed = small.snakemake(study, "harmonise", "--config", "site=quay")
    assert (changed.code, changed.jobs) == (2, frozenset())
    assert "sub-q01_ses-base came or changed; run the target `plan` again" in changed.text
    assert small.snakemake(study, "--dry-run", "harmonise", "--config", "site=mill").idle
    (study / "results" / "plan.json").unlink()
    missing = small.snakemake(study, "harmonise", "--config", "site=mill")
    assert missing.code == 2
    assert "the plan is missing; run the target `plan`" in missing.text
    assert "Traceback" not in changed.text + missing.text


@pytest.mark.parametrize("setting", ["scans_per_submission=none", "site=quai"])
def test_a_wrong_setting_of_a_run_is_refused_in_one_line(study, setting):
    refused = small.snakemake(study, "--config", setting)
    assert refused.code == 2
    assert setting in refused.text
    assert "Traceback" not in refused.text


def test_a_part_whose_image_does_not_fit_its_record_stops_the_run(finished_study, tmp_path):
    study_dir = small.make_study(tmp_path / "study")
    run(study_dir)
    image = study_dir / "results/harmonised/sub-q01/ses-base/pet/sub-q01_ses-base_desc-harmonised_pet.nii.gz"
    image.write_bytes(image.read_bytes()[:-50])
    done = small.snakemake(study_dir, *PARTS)
    assert done.code == 1
    logs = [path.read_text() for path in (study_dir / ".evenblur/logs/gather_records").iterdir()]
    assert [text for text in logs if "is not the image that its record states" in text]
