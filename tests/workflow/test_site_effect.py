"""Regions and phantoms of a small study, compared between its sites before and after."""

import csv
import json

import numpy as np
import pytest

import small_study as small
from small_study import snakemake

pytestmark = pytest.mark.slow

REGIONS = "region image value centre_mm diameter_mm reference"


def labels(subject):
    """Two labelled boxes, on the scan's own grid."""
    volume = np.zeros(small.SHAPE, dtype=np.float32)
    volume[16:28, 16:28, 12:20] = 1
    volume[28:40, 16:40, 20:28] = 2
    return volume


def add_regions(study):
    for subject in small.SUBJECTS:
        small.save(study / "masks" / f"{subject}.nii.gz", labels(subject))
    rows = [
        ["box", "masks/{subject}.nii.gz", "1", "", "", "no"],
        ["other", "masks/{subject}.nii.gz", "2", "", "", "yes"],
        ["ball", "", "", "55;55;50", "20", "no"],
        ["away", "", "", "900;0;0", "20", "no"],
    ]
    small.write_table(study / "config" / "regions.tsv", REGIONS, rows)


def means(study, subject):
    path = study / "results" / "site_effect" / "regions" / f"sub-{subject}_ses-base.json"
    return json.loads(path.read_text())["regions"]


def test_regional_means_and_their_rerun(study):
    add_regions(study)
    run = snakemake(study)
    assert run.code == 0, run.text
    expected = small.scan_volume("q01").astype(float)[labels("q01") == 1].mean()
    found = means(study, "q01")
    assert found["box"]["before"] == pytest.approx(expected, rel=1e-5)
    assert found["box"]["voxels"] == 12 * 12 * 8
    x, y, z = np.meshgrid(*(np.arange(n) * s for n, s in zip(small.SHAPE, small.VOXEL, strict=True)), indexing="ij")
    ball = (x - 55) ** 2 + (y - 55) ** 2 + (z - 50) ** 2 <= 100
    assert found["ball"]["before"] == pytest.approx(small.scan_volume("q01").astype(float)[ball].mean(), rel=1e-5)
    assert found["ball"]["after"] != found["ball"]["before"]
    assert found["away"]["why"].startswith("only 0 voxels")
    record = json.loads((study / "results/site_effect/site_effect.json").read_text())
    assert [row["region"] for row in record["regions"]] == ["box", "other", "ball"]
    assert record["regions"][0]["before"]["scans"] == 5
    assert len(record["regions_left_out"]) == 5
    assert 'id="effect"' in (study / "results/audit/report.html").read_text()
    assert snakemake(study).idle

    # Another mask of one subject measures that subject anew, and nothing else but the comparison and the report.
    moved = np.roll(labels("m01"), 3, axis=0)
    small.save(study / "masks" / "m01.nii.gz", moved, date_s=1_700_000_100)
    run = snakemake(study, "audit")
    assert run.jobs == {"Measure the regions of sub-m01_ses-base", small.EFFECT, small.REPORT}
    # The bag waits for its turn: a later run still sees that it is out of date.
    assert snakemake(study).jobs == {small.PACK}
    assert snakemake(study).idle

    # A mask that is gone is a region without a mean, and no failure.
    (study / "masks" / "q02.nii.gz").unlink()
    run = snakemake(study)
    assert run.code == 0, run.text
    assert "missing" in means(study, "q02")["box"]["why"]


def test_covariates_have_a_row_for_every_accepted_scan(study):
    with (study / "results" / "audit" / "covariates.tsv").open(newline="") as stream:
        rows = list(csv.DictReader(stream, delimiter="\t"))
    assert {row["subject"] for row in rows} == set(small.SUBJECTS)
    row = next(row for row in rows if row["subject"] == "q01")
    # Three axes of the kernel on 2 x 2 x 2.5 mm voxels; wide kernels follow 0.664282 x voxel / FWHM a variance factor.
    sizes = [float(row["kernel_in_plane_mm"])] * 2 + [float(row["kernel_axial_mm"])]
    expected = np.sqrt(np.prod([0.664282 * s / w for s, w in zip(small.VOXEL, sizes, strict=True)]))
    assert float(row["noise_factor"]) == pytest.approx(expected, rel=0.02)


def test_a_broken_table_of_regions_is_refused(study):
    small.write_table(study / "config" / "regions.tsv", REGIONS, [["box", "masks/{patient}.nii.gz", "1", "", "", "no"]])
    run = snakemake(study)
    assert run.code == 2
    assert "config/regions.tsv, row 2" in run.text
    assert "{patient}" in run.text
