"""A study on a real Slurm of one node: the bytes of a local run, many scans a submission, nothing left to do."""

import re
import shutil
import subprocess
import sys
import tempfile
from collections import Counter
from pathlib import Path

import pytest

import small_study as small
from single_node import SingleNode

pytestmark = [pytest.mark.slow, pytest.mark.cluster]

PROFILE = small.PROGRAM / "workflow" / "profiles" / "slurm"
SCANS = {f"q{number:02d}": "quay-1" for number in range(1, 4)} | {f"m{number:02d}": "mill-1" for number in range(1, 3)}


def make_study(study_dir):
    """Two setups, one measured on a phantom and one declared, with five scans and a region in each."""
    config = study_dir / "config"
    config.mkdir(parents=True)
    (config / "study.yaml").write_text(small.SETTINGS)
    columns = "setup site declared_in_plane_mm declared_axial_mm declared_source"
    rows = [["quay-1", "quay", "", "", ""], ["mill-1", "mill", "6.5", "5.5", "invented"]]
    small.write_table(config / "setups.tsv", columns, rows)
    small.write_table(config / "phantoms.tsv", small.PHANTOM_COLUMNS, small.phantom_rows()[:1])
    rows = [[key, "base", setup, "2026-02-01", f"images/{key}.nii.gz"] for key, setup in SCANS.items()]
    small.write_table(config / "scans.tsv", small.SCAN_COLUMNS, rows)
    small.write_table(config / "regions.tsv", "region centre_mm diameter_mm", [["ball", "55;55;50", "20"]])
    small.save(study_dir / "images" / "quay-1.nii.gz", small.phantom_volume("quay-1"))
    for key in SCANS:
        small.save(study_dir / "images" / f"{key}.nii.gz", small.scan_volume(key))
    return study_dir


@pytest.fixture(scope="module")
def cluster():
    # munged wants its socket where everybody could reach it, which pytest's own folders do not allow.
    with tempfile.TemporaryDirectory(prefix="slurm-") as folder, SingleNode(Path(folder)) as node:
        yield node


@pytest.fixture(scope="module")
def on_cluster(cluster, tmp_path_factory):
    """A study run whole through the profile, and what the run said."""
    study_dir = make_study(tmp_path_factory.mktemp("on cluster") / "study")
    return study_dir, submit(cluster, study_dir)


def python_without_spaces(cluster):
    """The Python of the tests; by a link where its path has a space, since the executor hands the path on as it is."""
    if " " not in sys.executable:
        return sys.executable
    link = cluster.base / "environment"
    if not link.is_symlink():
        link.symlink_to(Path(sys.executable).parents[1])
    return str(link / "bin" / "python")


def submit(cluster, study_dir, *arguments):
    """Run the workflow with the profile on the test's cluster; squeue answers, since there is no accounting."""
    command = [python_without_spaces(cluster), "-m", "snakemake", "--snakefile", small.PROGRAM / "Snakefile"]
    command += ["--directory", study_dir, "--profile", PROFILE, "--latency-wait", "5"]
    command += ["--slurm-status-command", "squeue", "--slurm-init-seconds-before-status-checks", "8"]
    command += ["--default-resources", "slurm_partition=test", "--slurm-no-account"]
    done = subprocess.run(
        [*command, *arguments],
        env={**cluster.environment, "SOURCE_DATE_EPOCH": small.environment()["SOURCE_DATE_EPOCH"]},
        capture_output=True,
        text=True,
        timeout=300,
        check=False,
        cwd=study_dir,
    )
    text = done.stdout + done.stderr
    print(text)
    assert done.returncode == 0, text
    return text


def test_a_cluster_gives_the_bytes_of_a_local_run(on_cluster, tmp_path):
    study_dir, _ = on_cluster
    local = shutil.copytree(study_dir, tmp_path / "local", ignore=shutil.ignore_patterns(".*", "results"))
    assert small.snakemake(local).code == 0
    assert small.result_bytes(study_dir) == small.result_bytes(local)


def test_one_submission_carries_many_scans_on_one_processor(on_cluster, cluster):
    _, said = on_cluster
    submissions = re.findall(r"^(?:Job|Group job) (\S+) has been submitted", said, flags=re.MULTILINE)
    finished = cluster.completed()
    # Intake of the scans and of the phantom, its measurement, two periods' scans with the means of their regions, the
    # achieved width, the comparison of the sites, the report's pictures.
    assert len(submissions) == len(finished) == 8, said
    assert {(job["JobState"], job["ProcCnt"]) for job in finished} == {("COMPLETED", "1")}
    jobs = Counter(re.findall(r"^Finished jobid: \d+ \(Rule: (\w+)\)", said, flags=re.MULTILINE))
    assert jobs["take_in_image"] == len(SCANS) + 1
    assert jobs["smooth_scan"] == jobs["measure_regions"] == len(SCANS)


def test_a_finished_study_asks_neither_the_cluster_nor_this_computer_for_anything(on_cluster, cluster):
    study_dir, _ = on_cluster
    assert "Nothing to be done" in submit(cluster, study_dir)
    assert small.snakemake(study_dir).idle
