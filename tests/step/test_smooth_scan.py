"""The step command: what it writes, and its one line for bad input."""

import json
import subprocess
import sys
from pathlib import Path

import nibabel as nib
import numpy as np
import pytest

from evenblur.images.digests import file_sha256

STEP = Path(__file__).parents[2] / "scripts" / "smooth_scan.py"


def run(folder: Path, *arguments: str) -> subprocess.CompletedProcess:
    command = [sys.executable, str(STEP), "--in-plane-mm", "6", "--axial-mm", "5", "--out", "out/h.nii.gz"]
    return subprocess.run(
        [*command, "--record", "out/h.json", *arguments], cwd=folder, capture_output=True, text=True, check=False
    )


@pytest.fixture
def study(tmp_path):
    values = np.random.default_rng(2).random((20, 18, 16, 2)).astype(np.float32)
    (tmp_path / "raw data").mkdir()
    nib.save(nib.Nifti1Image(values, np.diag([2.0, 2.0, 3.0, 1.0])), tmp_path / "raw data" / "s.nii.gz")
    return tmp_path


def test_step_writes_image_and_record_and_says_nothing(study):
    scan = study / "raw data" / "s.nii.gz"
    done = run(
        study,
        *("--image", "raw data/s.nii.gz", "--expect-sha256", file_sha256(scan), "--code-token", "f00"),
        *("--facts", json.dumps({"subject": "q01", "target": {"in_plane_mm": 8.0, "axial_mm": 8.0}})),
    )
    assert (done.returncode, done.stdout, done.stderr) == (0, "", "")
    assert sorted(path.name for path in (study / "out").iterdir()) == ["h.json", "h.nii.gz"]
    block = json.loads((study / "out" / "h.json").read_text())["Evenblur"]
    assert block["input"]["path"] == "raw data/s.nii.gz"
    assert block["subject"] == "q01"
    assert block["smoothing_version"].endswith("+f00")
    assert nib.load(study / "out" / "h.nii.gz").shape == (20, 18, 16, 2)


def test_facts_may_stand_in_a_file(study):
    (study / "facts.json").write_text('{"subject": "q02"}')
    assert run(study, "--image", "raw data/s.nii.gz", "--facts", "facts.json").returncode == 0
    assert json.loads((study / "out" / "h.json").read_text())["Evenblur"]["subject"] == "q02"


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (("--image", "none.nii.gz"), "none.nii.gz: the file is missing"),
        (("--image", "raw data/s.nii.gz", "--expect-sha256", "00"), "changed during the run"),
        (("--image", "raw data/s.nii.gz", "--axial-mm", "80"), "slices"),
        (("--image", "raw data/s.nii.gz", "--axial-mm", "-1"), "not a width"),
        (("--image", "raw data/s.nii.gz", "--facts", "[1]"), "--facts"),
        (("--image", "raw data/s.nii.gz", "--facts", "{"), "--facts"),
        (("--image", "broken.nii.gz"), "broken.nii.gz: cannot be read"),
        (("--image", "raw data/s.nii.gz", "--out", "out/h.mha"), "out/h.mha"),
    ],
)
def test_bad_input_is_one_line_and_exit_code_2(study, arguments, words):
    (study / "broken.nii.gz").write_bytes(b"not an image at all")
    done = run(study, *arguments)
    assert done.returncode == 2
    assert words in done.stderr
    assert done.stderr.count("\n") == 1
    assert not list(study.glob("out/*"))


def test_failed_second_run_leaves_the_first_result_alone(study):
    assert run(study, "--image", "raw data/s.nii.gz").returncode == 0
    before = {path.name: path.read_bytes() for path in (study / "out").iterdir()}
    scan = study / "raw data" / "s.nii.gz"
    scan.write_bytes(scan.read_bytes()[:-100])
    assert run(study, "--image", "raw data/s.nii.gz").returncode == 2
    assert {path.name: path.read_bytes() for path in (study / "out").iterdir()} == before


def test_step_loads_no_part_of_scipy_that_slows_its_start(study):
    code = (
        "import sys; sys.argv[0] = 'x'; from evenblur import command; import smooth_scan;"
        "command.run(smooth_scan.main, sys.argv[1:]);"
        "print({'scipy.fft', 'scipy.ndimage', 'scipy.linalg', 'scipy.special'} & set(sys.modules))"
    )
    done = subprocess.run(
        [
            *(sys.executable, "-c", code, "--image", "raw data/s.nii.gz", "--in-plane-mm", "6", "--axial-mm", "5"),
            *("--out", "o.nii.gz", "--record", "o.json"),
        ],
        cwd=study,
        env={"PYTHONPATH": str(STEP.parent), "PATH": ""},
        capture_output=True,
        text=True,
        check=True,
    )
    assert done.stdout.strip() == "set()"
