"""Faults of the machine: a full disk, folders that may not be written, killed jobs, files that change or vanish.

Each ends in one line with exit code 2 (or by the signal), with nothing half written, and works once mended.
"""

import json
import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import nibabel as nib
import numpy as np
import pytest

SCRIPTS = Path(__file__).resolve().parents[2] / "scripts"
WIDTHS = ["--in-plane-mm", "5", "--axial-mm", "5"]


def write_scan(path: Path, shape: tuple[int, ...] = (40, 40, 30)) -> Path:
    path.parent.mkdir(parents=True, exist_ok=True)
    volume = np.random.default_rng(3).gamma(2.0, 50.0, shape).astype(np.float32)
    nib.save(nib.Nifti1Image(volume, np.diag([2.0, 2.0, 3.0, 1.0])), path)
    return path


def steps(image: str, out: str = "out") -> dict[str, list[str]]:
    """The steps that read an image and write, as calls in a folder."""
    kind = ["--tolerant", "--kind", "point_source"]
    return {
        "take_in_image": [f"--image={image}", "--record", f"{out}/i.json"],
        "measure_resolution": [f"--image={image}", *kind, "--out", f"{out}/p.json"],
        "smooth_scan": [f"--image={image}", *WIDTHS, "--out", f"{out}/h.nii.gz", "--record", f"{out}/h.json"],
    }


def call(
    folder: Path, step: str, *arguments: str, before: str = "", environment: dict[str, str] | None = None
) -> subprocess.CompletedProcess[str]:
    """Run a step in a folder; `before` is Python that the process carries out first, with the library loaded."""
    program = (
        "import os, resource, sys\n"
        f"sys.path.insert(0, {str(SCRIPTS)!r})\n"
        f"import {step}\n"
        "from evenblur import command, intake, measuring\n"
        "from evenblur.images import harmonise\n"
        "from evenblur.phantoms import point_source\n"
        "from evenblur.study import rows, settings, yaml_reading\n"
        f"{before}\n"
        f"sys.exit(command.run({step}.main, sys.argv[1:]))"
    )
    return subprocess.run(
        [sys.executable, "-c", program, *arguments],
        cwd=folder,
        env={**os.environ, **(environment or {})},
        capture_output=True,
        text=True,
        timeout=120,
        check=False,
    )


def one_line(done: subprocess.CompletedProcess[str]) -> str:
    assert (done.returncode, done.stderr.count("\n")) == (2, 1), done.stderr
    return done.stderr


@pytest.mark.parametrize("step", ["take_in_image", "measure_resolution", "smooth_scan"])
def test_a_full_disk_is_one_line_and_leaves_nothing(tmp_path, step):
    write_scan(tmp_path / "a.nii")
    full = "resource.setrlimit(resource.RLIMIT_FSIZE, (200, 200))"  # no file may grow beyond: as a disk that is full
    arguments = steps("a.nii")[step]
    assert "make room" in one_line(call(tmp_path, step, *arguments, before=full))
    assert [path for path in (tmp_path / "out").rglob("*") if path.is_file()] == []
    assert call(tmp_path, step, *arguments).returncode == 0
    assert not list((tmp_path / "out").glob(".*.part"))


@pytest.mark.parametrize("step", ["take_in_image", "measure_resolution", "smooth_scan"])
def test_results_that_may_not_be_written_are_one_line(tmp_path, step):
    folder = tmp_path / "study"
    write_scan(folder / "a.nii")
    (folder / "out").mkdir()
    for place in (folder, *list(folder.parents)[:3]):
        place.chmod(0o755)  # another user can come as far as here
    (folder / "out").chmod(0o555)
    other = "os.seteuid(65534) if os.geteuid() == 0 else None"
    assert "Permission denied" in one_line(call(folder, step, *steps("a.nii")[step], before=other))
    assert list((folder / "out").iterdir()) == []


@pytest.mark.parametrize("step", ["take_in_image", "measure_resolution", "smooth_scan"])
def test_a_file_in_the_place_of_a_folder_is_one_line(tmp_path, step):
    write_scan(tmp_path / "a.nii")
    (tmp_path / "out").write_text("not a folder")
    assert "out" in one_line(call(tmp_path, step, *steps("a.nii")[step]))


def test_an_image_that_may_not_be_read_is_held(tmp_path):
    folder = tmp_path / "study"
    write_scan(folder / "a.nii").chmod(0)
    for place in (folder, *list(folder.parents)[:3]):
        place.chmod(0o777)
    other = "os.seteuid(65534) if os.geteuid() == 0 else None"
    done = call(folder, "take_in_image", "--image=a.nii", "--record", "i.json", before=other)
    assert done.returncode == 0, done.stderr
    assert json.loads((folder / "i.json").read_text())["holds"] == ["image_unreadable"]


@pytest.mark.parametrize("step", ["take_in_image", "measure_resolution", "smooth_scan"])
def test_too_little_memory_is_one_line_or_a_held_row(tmp_path, step):
    write_scan(tmp_path / "a.nii", (120, 120, 100))
    little = (
        "pages = int(open('/proc/self/statm').read().split()[0])\n"
        "limit = pages * resource.getpagesize() + (8 << 20)\n"
        "resource.setrlimit(resource.RLIMIT_AS, (limit, limit))"
    )
    done = call(tmp_path, step, *steps("a.nii")[step], before=little)
    assert "Traceback" not in done.stderr
    assert done.returncode in (0, 2)
    if done.returncode == 0:
        record = json.loads(next((tmp_path / "out").glob("*.json")).read_text())
        assert record.get("holds") or record["flags"]
    else:
        one_line(done)


def test_an_image_that_vanished_or_changed_after_the_plan_fails_in_one_line(tmp_path):
    from evenblur.images.digests import file_sha256

    image = write_scan(tmp_path / "a.nii")
    arguments = [*steps("a.nii")["smooth_scan"], f"--expect-sha256={file_sha256(image)}"]
    write_scan(image, (40, 40, 31))
    assert "changed during the run" in one_line(call(tmp_path, "smooth_scan", *arguments))
    image.unlink()
    assert "a.nii" in one_line(call(tmp_path, "smooth_scan", *arguments))
    assert not (tmp_path / "out").exists() or list((tmp_path / "out").iterdir()) == []


def test_a_killed_job_leaves_no_result_and_the_next_one_clears_up(tmp_path):
    write_scan(tmp_path / "a.nii.gz", (64, 64, 40, 60))
    command = [sys.executable, str(SCRIPTS / "smooth_scan.py"), *steps("a.nii.gz")["smooth_scan"]]
    process = subprocess.Popen(command, cwd=tmp_path, stderr=subprocess.PIPE)
    until = time.monotonic() + 60
    while not list((tmp_path / "out").glob(".*.part")):  # the marker: writing has begun
        assert time.monotonic() < until
        time.sleep(0.002)
    process.send_signal(signal.SIGKILL)
    process.communicate()
    assert not (tmp_path / "out/h.nii.gz").exists()
    assert subprocess.run(command, cwd=tmp_path, check=False).returncode == 0
    assert sorted(path.name for path in (tmp_path / "out").iterdir()) == ["h.json", "h.nii.gz"]


ODD = ["two  spaces, quote'\"s, dollar$HOME`x`", "semi;colon&and|or [a]*?! {curly} %s", "ä-ø-漢-🧠 tab\there"]


@pytest.mark.parametrize("name", [*ODD, "x" * 200])
def test_odd_and_long_names_are_names_like_others(tmp_path, name):
    folder = tmp_path / name / name
    write_scan(folder / f"{name}.nii.gz")
    for step in ("take_in_image", "smooth_scan"):
        done = call(folder, step, *steps(f"{name}.nii.gz", name)[step])
        assert (done.returncode, done.stderr) == (0, "")
    assert (folder / name / "h.nii.gz").is_file()


def test_links_out_of_the_study_are_read_and_never_written_through(tmp_path):
    elsewhere = write_scan(tmp_path / "elsewhere" / "a.nii")
    before = elsewhere.read_bytes()
    study = tmp_path / "study"
    study.mkdir()
    (study / "a.nii").symlink_to(elsewhere)
    (study / "out").mkdir()
    (study / "out/h.nii.gz").symlink_to(elsewhere)
    for step, arguments in steps("a.nii").items():
        done = call(study, step, *arguments)
        if step == "smooth_scan":
            assert "is the scan itself" in one_line(done)
            (study / "out/h.nii.gz").unlink()
            (study / "out/h.nii.gz").symlink_to(tmp_path / "elsewhere" / "other")
            assert call(study, step, *arguments).returncode == 0
            assert not (study / "out/h.nii.gz").is_symlink()
    assert elsewhere.read_bytes() == before
    assert [path.name for path in elsewhere.parent.iterdir()] == ["a.nii"]


@pytest.mark.parametrize(
    "environment",
    [
        {"TZ": "Pacific/Kiritimati", "LC_ALL": "de_DE.UTF-8"},
        {"TZ": "Etc/GMT+12", "LC_ALL": "POSIX", "PYTHONUTF8": "0", "PYTHONCOERCECLOCALE": "0"},
    ],
    ids=lambda environment: " ".join(environment.values()),
)
def test_neither_time_zone_nor_language_changes_a_byte(tmp_path, environment):
    write_scan(tmp_path / "a.nii.gz")
    for step in steps("a.nii.gz"):
        assert call(tmp_path, step, *steps("a.nii.gz", "here")[step]).returncode == 0
        done = call(tmp_path, step, *steps("a.nii.gz", "there")[step], environment=environment)
        assert done.returncode == 0, done.stderr
    for file in (tmp_path / "here").iterdir():
        assert file.read_bytes() == (tmp_path / "there" / file.name).read_bytes()
