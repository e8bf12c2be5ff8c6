"""Volumes of other origins go through as scans: those that the nibabel package ships for its own tests.

Source: the data folder of nibabel's tests (an ECAT 7 volume, NIfTI-1 and Analyze files). They are no phantoms and no
patients' data; here they only show that foreign headers, types and grids are read, smoothed and recorded.
"""

import csv
import io
import shutil
from pathlib import Path

import nibabel as nib
import numpy as np
import pytest

import small_study as small
from evenblur.check.auditing import check_handover

pytestmark = pytest.mark.slow

DATA = Path(nib.__file__).parent / "tests" / "data"
FILES = {
    "ecat": "tinypet.v",
    "anatomical": "anatomical.nii",
    "functional": "functional.nii",
    "example4d": "example4d.nii.gz",
    "standard": "standard.nii.gz",
    "reoriented": "reoriented_anat_moved.nii",
}


@pytest.fixture(scope="module")
def finished(tmp_path_factory):
    study_dir = small.make_study(tmp_path_factory.mktemp("foreign") / "study")
    rows = []
    for subject, name in FILES.items():
        shutil.copy(DATA / name, study_dir / "images" / name)
        rows.append([subject, "base", "quay-1", "2026-02-01", f"images/{name}"])
    small.write_table(study_dir / "config" / "scans.tsv", small.SCAN_COLUMNS, rows)
    # These volumes have other voxels than the phantom: nothing that should pass for real in a study.
    with (study_dir / "config" / "study.yaml").open("a") as settings:
        settings.write("reconstruction_mismatch: flag\n")
    run = small.snakemake(study_dir)
    assert run.code == 0, run.text
    return study_dir


def load(path):
    """An image by nibabel; ECAT from memory, for its reader leaves files open."""
    if path.suffix != ".v":
        return nib.load(path)
    data = io.BytesIO(path.read_bytes())
    return nib.ecat.EcatImage.from_file_map(nib.ecat.EcatImage.make_file_map({"header": data, "image": data}))


def scans(study_dir):
    with (study_dir / "results/audit/scans.tsv").open(newline="") as stream:
        return {row["subject"]: row for row in csv.DictReader(stream, delimiter="\t")}


def test_every_volume_has_its_row_and_no_run_stops(finished):
    rows = scans(finished)
    assert set(rows) == set(FILES)
    assert all(row["status"] == "accepted" or row["reasons"] for row in rows.values())
    assert sum(row["status"] == "accepted" for row in rows.values()) >= 3


@pytest.mark.parametrize("subject", list(FILES))
def test_geometry_and_totals_come_through(finished, subject):
    row = scans(finished)[subject]
    if row["status"] == "held":
        assert row["reasons"] in ("under_sampled", "oblique_grid", "under_sampled;oblique_grid", "too_few_slices")
        return
    before = load(finished / row["input"])
    after = nib.load(finished / row["output"])
    frames = [length for length in before.shape if length > 1]
    assert [length for length in after.shape if length > 1] == frames
    assert np.allclose(after.affine, before.affine, atol=1e-4)
    assert after.get_data_dtype() == np.float32
    total = float(np.asarray(before.dataobj, dtype=np.float64).sum())
    scale = float(np.abs(np.asarray(before.dataobj, dtype=np.float64)).sum())
    assert abs(float(np.asarray(after.dataobj, dtype=np.float64).sum()) - total) <= 1e-6 * scale


def test_the_auditors_other_route_reads_every_format_and_agrees(finished):
    lines = []
    assert check_handover(finished / "results/handover", study=finished, sample=99, say=lines.append), lines[-1]
    again = [line for line in lines if line.startswith("smoothed again")]
    assert len(again) == sum(row["status"] == "accepted" for row in scans(finished).values())
    assert all(line.endswith("of max   agrees") for line in again), again
