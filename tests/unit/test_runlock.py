"""One run at a time: a live run keeps the study, a dead one gives it up."""

import json
import os
import socket
import subprocess
import sys

import pytest

from evenblur.runlock import LOCK_NAME, StudyLockedError, only_looks, process_start, read_lock, release_lock, take_lock


def write_lock(study_dir, **entries):
    path = study_dir / LOCK_NAME
    path.parent.mkdir(exist_ok=True)
    path.write_text(json.dumps({"host": socket.gethostname(), "process_id": 1, "started": "x", **entries}))


def test_a_lock_is_taken_seen_and_given_back(tmp_path):
    take_lock(tmp_path)
    lock = read_lock(tmp_path)
    assert (lock.host, lock.process_id, lock.alive) == (socket.gethostname(), os.getpid(), True)
    release_lock(tmp_path)
    assert read_lock(tmp_path) is None


def test_a_live_run_refuses_a_second_one_with_its_host_and_process(tmp_path):
    other = subprocess.Popen([sys.executable, "-c", "import time; time.sleep(60)"])
    try:
        write_lock(tmp_path, process_id=other.pid, started=process_start(other.pid))
        with pytest.raises(StudyLockedError, match=f"host {socket.gethostname()}, process {other.pid}"):
            take_lock(tmp_path)
        release_lock(tmp_path)
        assert read_lock(tmp_path).process_id == other.pid
    finally:
        other.kill()
        other.wait()
    take_lock(tmp_path)
    assert read_lock(tmp_path).process_id == os.getpid()


def test_a_process_number_that_was_given_away_does_not_keep_the_study(tmp_path):
    write_lock(tmp_path, process_id=os.getppid(), started="an earlier process")
    take_lock(tmp_path)
    assert read_lock(tmp_path).process_id == os.getpid()


def test_a_lock_of_another_host_is_respected(tmp_path):
    write_lock(tmp_path, host="another-host")
    with pytest.raises(StudyLockedError, match="another-host"):
        take_lock(tmp_path)


@pytest.mark.parametrize(
    ("arguments", "dry"),
    [
        (["-n"], True),
        (["-np", "--cores", "2"], True),
        (["-Fn"], True),
        (["--dry-run"], True),
        (["-sSnakefile", "-d../another", "-c1"], False),
        (["plan"], False),
        (["--unlock"], False),
    ],
)
def test_only_a_dry_run_may_work_beside_another_run(arguments, dry):
    assert only_looks(arguments) == dry


def test_a_damaged_lock_is_replaced(tmp_path):
    (tmp_path / ".evenblur").mkdir()
    (tmp_path / LOCK_NAME).write_text("{")
    take_lock(tmp_path)
    assert read_lock(tmp_path).process_id == os.getpid()


def test_of_many_runs_that_find_a_dead_lock_only_one_gets_it(tmp_path):
    program = (
        "import sys, time; sys.path.insert(0, sys.argv[2])\n"
        "from pathlib import Path\n"
        "from evenblur.runlock import StudyLockedError, take_lock\n"
        "try:\n"
        "    take_lock(Path(sys.argv[1])); print('taken', flush=True); time.sleep(3)\n"
        "except StudyLockedError:\n"
        "    print('refused', flush=True)\n"
    )
    for _ in range(3):
        write_lock(tmp_path, process_id=2**22 - 7)
        scripts = next(path for path in sys.path if path.endswith("scripts"))
        runs = [
            subprocess.Popen([sys.executable, "-c", program, tmp_path, scripts], stdout=subprocess.PIPE, text=True)
            for _ in range(6)
        ]
        words = [run.communicate()[0].strip() for run in runs]
        assert sorted(words) == ["refused"] * 5 + ["taken"]
