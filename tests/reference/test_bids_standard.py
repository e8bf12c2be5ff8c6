"""The harmonised data set passes a BIDS validator as a derivative, with no network."""

import json
import os
import shutil
import subprocess
from pathlib import Path

import bids_validator_deno
import nibabel as nib
import numpy as np
import pytest
from deno import find_deno_bin

import describe_dataset
import smooth_scan
from evenblur.study.reading import load_study
from evenblur.study.records import Layout

VALIDATOR = Path(bids_validator_deno.__file__).with_name("bids-validator.js")
SOURCE = "BIDS 1.11.1 (schema 1.2.7) as bids-validator-deno 3.0.2 checks it"

# Recommendations about the data set as a whole, which whoever publishes it answers.
LEFT_TO_THE_STUDY = {"README_FILE_MISSING", "TOO_FEW_AUTHORS"}

TABLES = {
    "setups": ["setup site", "q-1 q"],
    "phantoms": ["phantom setup phantom_session acquired kind image"],
    "scans": [
        "subject session setup acquired image run tracer",
        "01 base q-1 2026-01-05 scans/one.nii.gz  invented",
        "01 later q-1 2026-02-05 scans/frames.nii 2 invented",
        "02 base q-1 2026-01-06 scans/bare.nii.gz  ",
    ],
}
FIELDS = {
    "Units": "Bq/mL",
    "TracerName": "invented",
    "TracerRadionuclide": "F18",
    "ImageDecayCorrected": True,
    "ReconMethodName": "invented",
    "ReconMethodParameterLabels": ["none"],
    "ReconFilterType": "none",
    "AttenuationCorrection": "none",
    "Manufacturer": "Invented",
}


def study(folder, modality):
    """A study of three invented scans: one of one frame, one of three frames, one without a sidecar."""
    (folder / "config").mkdir(parents=True)
    (folder / "scans").mkdir()
    (folder / "config/study.yaml").write_text(f"study: {{title: Invented}}\nmodality: {modality}\n")
    for name, lines in TABLES.items():
        (folder / f"config/{name}.tsv").write_text("".join(line.replace(" ", "\t") + "\n" for line in lines))
    rng = np.random.default_rng(1)
    for name, frames in (("one.nii.gz", ()), ("frames.nii", (3,)), ("bare.nii.gz", ())):
        voxels = rng.gamma(2.0, 500.0, (12, 12, 10, *frames)).astype(np.float32)
        image = nib.Nifti1Image(voxels, np.diag([3.0, 3.0, 3.0, 1.0]))
        image.header.set_xyzt_units("mm", "sec")
        nib.save(image, folder / "scans" / name)
    times = {"FrameTimesStart": [0, 300, 600], "FrameDuration": [300, 300, 300]}
    (folder / "scans/one.json").write_text(json.dumps({**FIELDS, "FrameTimesStart": [0], "FrameDuration": [600]}))
    (folder / "scans/frames.json").write_text(json.dumps({**FIELDS, **times}))


@pytest.fixture(scope="module")
def harmonised(tmp_path_factory):
    """The harmonised data set that the steps make of the study, by modality."""
    made = {}
    for modality in ("pet", "spect"):
        folder = tmp_path_factory.mktemp(modality) / "study"
        study(folder, modality)
        describe_dataset.main(["--study-dir", str(folder)])
        read = load_study(folder)
        layout = Layout(read)
        for row in read.scans:
            out, record = folder / layout.harmonised_image(row), folder / layout.scan_record(row)
            out.parent.mkdir(parents=True, exist_ok=True)
            given = {"image": folder / row.image, "in-plane-mm": 6.0, "axial-mm": 5.0, "out": out, "record": record}
            facts = {"Sources": [f"bids:raw:{row.image}"], "subject": row.subject, "setup": row.setup}
            words = [f"--{name}={value}" for name, value in given.items()]
            smooth_scan.main([*words, "--facts", json.dumps(facts)])
        made[modality] = folder / layout.harmonised
    return made


def complaints(dataset, cache):
    """The validator's (severity, code, place) for a data set; it may not use the network."""
    command = [find_deno_bin(), "run", "--no-remote", "--no-prompt", "--allow-read", "--allow-env", "--deny-net"]
    # The cache holds the validator's compiled code; nothing outside the test's own folder is written.
    environment = {**os.environ, "DENO_DIR": str(cache), "DENO_NO_UPDATE_CHECK": "1", "NO_COLOR": "1"}
    done = subprocess.run(
        [*command, VALIDATOR, dataset, "--format", "json"],
        capture_output=True,
        text=True,
        check=False,
        timeout=300,
        env=environment,
    )
    assert done.stdout.startswith("{"), done.stdout + done.stderr
    report = json.loads(done.stdout)
    assert report["summary"]["schemaVersion"] == "1.2.7"
    return [(issue["severity"], issue["code"], issue.get("location", "")) for issue in report["issues"]["issues"]]


@pytest.fixture(scope="module")
def cache(tmp_path_factory):
    return tmp_path_factory.mktemp("deno")


@pytest.mark.parametrize("modality", ["pet", "spect"])
def test_harmonised_data_set_is_a_valid_derivative(check, harmonised, cache, modality):
    found = complaints(harmonised[modality], cache)
    errors = [entry for entry in found if entry[0] == "error"]
    check.close(
        f"errors of a validator about the harmonised {modality.upper()} data set",
        source=SOURCE if modality == "pet" else f"{SOURCE}; its .bidsignore passes over what the standard lacks",
        expected=0,
        found=len(errors),
        within=0,
        digits=0,
    )
    others = sorted({code for severity, code, _ in found if severity != "error"} - LEFT_TO_THE_STUDY)
    check.holds(
        f"warnings of a validator about the harmonised {modality.upper()} data set",
        source=SOURCE,
        expected="none but README and authors, which the study gives",
        found=", ".join(others) or "none",
        true=not others,
    )


def broken_record(dataset):
    path = next(dataset.rglob("*_pet.json"))
    record = json.loads(path.read_text())
    del record["SkullStripped"]
    path.write_text(json.dumps(record))


def broken_name(dataset):
    path = next(dataset.rglob("*_pet.nii.gz"))
    path.rename(path.with_name(path.name.replace("_desc-harmonised", "_harmonised")))


def broken_frames(dataset):
    path = next(dataset.rglob("*later*_pet.json"))
    record = json.loads(path.read_text())
    record["FrameTimesStart"] = record["FrameTimesStart"][:2]
    path.write_text(json.dumps(record))


@pytest.mark.parametrize("damage", [broken_record, broken_name, broken_frames])
def test_validator_notices_a_damaged_data_set(harmonised, cache, tmp_path, damage):
    shutil.copytree(harmonised["pet"], tmp_path / "damaged")
    damage(tmp_path / "damaged")
    assert any(severity == "error" for severity, *_ in complaints(tmp_path / "damaged", cache))


def test_description_has_what_the_standard_requires(check, harmonised):
    # This validator does not look for these.
    described = json.loads((harmonised["pet"] / "dataset_description.json").read_text())
    check.holds(
        "entries of dataset_description.json that the standard requires of a derivative",
        source="BIDS specification 1.11.1, derivatives: Name, BIDSVersion, GeneratedBy with a Name",
        expected="present, type derivative, BIDS 1.11.1",
        found=f"{'present' if described['Name'] and described['GeneratedBy'][0]['Name'] else 'absent'}, "
        f"type {described['DatasetType']}, BIDS {described['BIDSVersion']}",
        true=bool(described["Name"] and described["GeneratedBy"][0]["Name"])
        and described["DatasetType"] == "derivative"
        and described["BIDSVersion"] == "1.11.1",
    )
    records = [json.loads(path.read_text()) for path in harmonised["pet"].rglob("*_pet.json")]
    linked = {source.split(":")[1] for record in records for source in record["Sources"]}
    check.holds(
        "data sets that records name as sources, and those that dataset_description.json links",
        source="BIDS specification 1.11.1, BIDS URIs: a data set named in one is linked in DatasetLinks",
        expected="raw, linked",
        found=f"{', '.join(sorted(linked))}, {'linked' if linked <= set(described['DatasetLinks']) else 'not linked'}",
        true=linked == {"raw"} and linked <= set(described["DatasetLinks"]),
    )
