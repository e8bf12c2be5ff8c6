"""The step commands on a folder of DICOM files: the same results as for a NIfTI file of the same volume."""

import json
import os
import shutil
import subprocess
import sys
from pathlib import Path

import nibabel as nib
import numpy as np
import pytest

from dicom_simulation import PLANTED, SAGITTAL, write_series
from evenblur.images.digests import folder_sha256
from evenblur.smoothing import smooth_volume

SCRIPTS = Path(__file__).parents[2] / "scripts"
SIGMA_PER_FWHM = 1 / np.sqrt(8 * np.log(2))
# Not to be found among what the steps say: what the headers hold of persons and places.
SECRETS = [part for value in PLANTED.values() for part in value.split("^") if len(part) > 1]


def run(step: str, folder: Path, *arguments: str) -> subprocess.CompletedProcess:
    command = [sys.executable, str(SCRIPTS / step), *arguments]
    environment = {**os.environ, "OPENBLAS_NUM_THREADS": "1"}
    return subprocess.run(command, cwd=folder, env=environment, capture_output=True, text=True, check=False)


def point_source(shape, voxel_mm, *, centre_mm, fwhm_mm) -> np.ndarray:
    """A point blurred by a Gaussian and sampled at voxel centres, widths and sizes along (column, row, slice)."""
    volume = np.ones(shape) * 20000.0
    for axis in range(3):
        along = np.arange(shape[axis]) * voxel_mm[axis] - centre_mm[axis]
        profile = np.exp(-0.5 * (along / (fwhm_mm[axis] * SIGMA_PER_FWHM)) ** 2)
        volume = volume * profile.reshape([-1 if k == axis else 1 for k in range(3)])
    noise = np.random.default_rng(5).standard_normal(shape)
    return volume + 20.0 * noise


# Sagittal slices, so that reading the axes wrongly would show: columns run to the back, rows to the feet (axial).
VOXEL_MM = (2.0, 2.4, 1.9)
FWHM_MM = (6.0, 8.0, 6.0)


@pytest.fixture
def study(tmp_path):
    volume = point_source((28, 24, 26), VOXEL_MM, centre_mm=(27.3, 29.1, 24.4), fwhm_mm=FWHM_MM)
    sizes = dict(zip(("between_columns_mm", "between_rows_mm", "slice_mm"), VOXEL_MM, strict=True))
    meant = write_series(tmp_path / "raw data", volume, directions=SAGITTAL, origin_mm=(20.0, -17.0, 40.0), **sizes)
    # By hand: columns to the back (-y), rows to the feet (-z), slices to the patient's right (+x) from x = -20.
    affine = np.array([[0, 0, 1.9, -20], [-2.0, 0, 0, 17], [0, -2.4, 0, 40], [0, 0, 0, 1]])
    nib.save(nib.Nifti1Image(meant, affine), tmp_path / "same.nii.gz")
    return tmp_path


def measure(study: Path, image: str) -> dict:
    done = run("measure_resolution.py", study, "--kind", "point_source", "--image", image, "--out", "p.json")
    assert (done.returncode, done.stderr) == (0, "")
    text = (study / "p.json").read_text()
    assert [secret for secret in SECRETS if secret.lower() in (text + done.stdout).lower()] == []
    return json.loads(text)


def test_phantom_measures_as_the_same_volume_does_in_nifti(study):
    ours, other = measure(study, "raw data"), measure(study, "same.nii.gz")
    assert ours["in_plane"] == other["in_plane"]
    assert ours["axial"] == other["axial"]
    assert ours["input"] == {"path": "raw data", "sha256": folder_sha256(study / "raw data")}
    # Noise of 0.1 % of the peak moves a fitted width by a few hundredths of a millimetre at most.
    assert ours["in_plane"]["fwhm_mm"] == pytest.approx(6.0, abs=0.05)
    assert ours["axial"]["fwhm_mm"] == pytest.approx(8.0, abs=0.05)


def test_scan_is_smoothed_and_written_as_nifti(study):
    arguments = ("--in-plane-mm", "6", "--axial-mm", "5", "--out", "h.nii.gz", "--record", "h.json")
    sha256 = folder_sha256(study / "raw data")
    done = run("smooth_scan.py", study, "--image", "raw data", "--expect-sha256", sha256, *arguments)
    assert (done.returncode, done.stdout, done.stderr) == (0, "", "")
    image, same = nib.load(study / "h.nii.gz"), nib.load(study / "same.nii.gz")
    np.testing.assert_allclose(image.affine, same.affine, atol=1e-5)  # NIfTI keeps single precision
    assert nib.aff2axcodes(image.affine) == ("P", "I", "R")
    # Rows run along the bed here, so the axial width belongs to the second array axis.
    expected = smooth_volume(same.get_fdata().astype(np.float32), voxel_mm=VOXEL_MM, fwhm_mm=(6.0, 5.0, 6.0))
    # The steps work on one thread, this test perhaps on more: single precision differs in its last bits.
    np.testing.assert_allclose(image.get_fdata(), expected, atol=1e-5 * float(expected.max()))
    record = json.loads((study / "h.json").read_text())
    assert record["Evenblur"]["input"]["sha256"] == sha256
    assert record["Evenblur"]["axial_axis"] == 1
    assert (record["Units"], record["ImageDecayCorrected"], record["FrameDuration"]) == ("Bq/mL", True, [1.0])
    everything = (study / "h.json").read_text() + image.header.binaryblock.decode("latin-1")
    assert [secret for secret in SECRETS if secret.lower() in everything.lower()] == []


@pytest.mark.parametrize("step", ["measure_resolution.py", "smooth_scan.py"])
def test_folder_that_cannot_be_used_is_one_line_and_exit_code_2(study, step):
    files = sorted((study / "raw data").iterdir())
    shutil.move(files[7], study / "kept elsewhere")
    arguments = ["--kind", "point_source"] if step.startswith("measure") else ["--in-plane-mm", "6", "--axial-mm", "5"]
    if step.startswith("smooth"):
        arguments += ["--record", "h.json"]
    done = run(step, study, "--image", "raw data", "--out", "h.nii", *arguments)
    assert done.returncode == 2
    assert done.stdout == ""
    assert done.stderr.count("\n") == 1
    assert done.stderr.startswith("raw data: the gap between slices ")
    assert not (study / "h.nii").exists()


def test_bad_folder_is_a_record_with_a_reason_at_intake(study):
    shutil.copy(sorted((study / "raw data").iterdir())[3], study / "raw data" / "again")
    done = run("take_in_image.py", study, "--image", "raw data", "--record", "i.json")
    assert (done.returncode, done.stdout, done.stderr) == (0, "", "")
    record = json.loads((study / "i.json").read_text())
    assert record["holds"] == ["image_unreadable"]
    assert "the same slice" in record["problems"][0]
