"""A run that was killed is taken up again; two runs at once do not meet."""

import os
import random
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest

import small_study as small

sys.path.append(str(small.PROGRAM / "tests" / "benchmarks"))
import kill_points

pytestmark = pytest.mark.slow

START = small.PROGRAM / "scripts" / "start.py"


def wait_for(condition, seconds=120):
    """Wait until something has happened; a test that waits in vain fails."""
    end = time.monotonic() + seconds
    while time.monotonic() < end:
        if condition():
            return
        time.sleep(0.02)
    pytest.fail("what the test waits for did not happen")


def begin(study_dir):
    """Start a run in a process group of its own."""
    return subprocess.Popen(
        small.command(study_dir),
        stdout=subprocess.DEVNULL,
        stderr=subprocess.DEVNULL,
        start_new_session=True,
        env=small.environment(),
    )


@pytest.fixture
def fresh_study(tmp_path):
    return small.make_study(tmp_path / "study")


@pytest.mark.parametrize(
    "marker",
    ["results/intake/scans/sub-q01_ses-base.json", "results/plan.json", "results/harmonised/sub-q01"],
)
def test_a_killed_run_ends_in_the_same_bytes_once_it_is_taken_up(fresh_study, finished_study, marker):
    run = begin(fresh_study)
    wait_for((fresh_study / marker).exists)
    os.killpg(run.pid, signal.SIGKILL)
    run.wait()
    again = subprocess.run(
        [sys.executable, START, "run", fresh_study, "--cores", "2"],
        capture_output=True,
        text=True,
        check=False,
        env=small.environment(),
    )
    assert again.returncode == 0, again.stdout + again.stderr
    assert small.result_bytes(fresh_study) == small.result_bytes(finished_study)


# Share of the files that a whole run writes, and what is killed; the benchmark draws forty such points.
POINTS = [
    (0.10, "main process"),
    (0.30, "one job"),
    (0.55, "one job"),
    (0.75, "workflow and jobs"),
    (0.95, "main process"),
]


@pytest.fixture(scope="module")
def expected(finished_study):
    results = {**small.result_bytes(finished_study), "history.tsv": (finished_study / "history.tsv").read_bytes()}
    return results, kill_points.files_in(finished_study)


@pytest.mark.parametrize("number", range(len(POINTS)))
def test_no_kill_leaves_anything_half_written(fresh_study, expected, number):
    share, way = POINTS[number]
    results, total = expected
    files = int(share * total)
    kill_points.kill_at(fresh_study, files=files, way=way, rng=random.Random(number))
    again = kill_points.take_up(fresh_study)
    assert again.returncode == 0, again.stdout + again.stderr
    assert kill_points.differences(fresh_study, results) == []


def test_a_second_run_at_once_is_refused_with_host_and_process(fresh_study):
    run = begin(fresh_study)
    try:
        wait_for((fresh_study / "results" / "intake").exists)
        second = small.snakemake(fresh_study)
        assert second.code == 2
        assert f"process {run.pid}" in second.text
        assert "Traceback" not in second.text
        by_start = subprocess.run(
            [sys.executable, START, "run", fresh_study], capture_output=True, text=True, check=False
        )
        assert by_start.returncode == 2
        assert str(run.pid) in by_start.stdout + by_start.stderr
        # Outputs that the first run is just writing count as incomplete for Snakemake.
        assert small.snakemake(fresh_study, "--dry-run", "--rerun-incomplete").code == 0
    finally:
        assert run.wait(timeout=300) == 0
    assert (fresh_study / "results/audit/report.html").exists()
    assert not (fresh_study / ".evenblur/lock").exists()


def test_nothing_half_written_is_left_behind(finished_study):
    assert [str(path) for path in Path(finished_study).rglob("*.part")] == []


def test_two_runs_from_nothing_give_the_same_bytes(fresh_study, finished_study):
    assert small.snakemake(fresh_study).code == 0
    assert small.result_bytes(fresh_study) == small.result_bytes(finished_study)


def test_no_absolute_path_stands_in_the_results(finished_study):
    for name, content in small.result_bytes(finished_study).items():
        assert str(finished_study).encode() not in content, name
        assert str(small.PROGRAM).encode() not in content, name
