"""Nothing of what headers and file names say about a person comes out anywhere.

A study whose images carry a token in every text field that their formats have runs whole, with sound images and with
such that are refused; then every file that the run wrote, unpacked, and all that it said, is searched for the tokens.
"""

import base64
import csv
import gzip
import json
import re
import subprocess
import sys
import warnings
from pathlib import Path

import nibabel as nib
import numpy as np
import pydicom
import pytest
from pydicom.datadict import DicomDictionary
from pydicom.dataset import Dataset

import small_study as small
from dicom_simulation import PLANTED, write_series
from evenblur.images.dicom_headers import _READ_FIELDS, ALLOWED_FIELDS
from evenblur.images.identity import IDENTITY_REMOVED, PATIENT_FIELDS

pytestmark = pytest.mark.slow

TOKEN = "PLNT7X"
TEXT_KINDS = ("AE", "CS", "LO", "LT", "PN", "SH", "ST", "UC", "UR", "UT")
DAY, MARKED_UID = "19010203", "1.2.826.0.1.3680043.8.498.777000777"
# What the image is read by, and what describes its pixels or its text: a token there is another kind of test.
LEFT_ALONE = {*_READ_FIELDS, *ALLOWED_FIELDS, "SpecificCharacterSet", IDENTITY_REMOVED, "TransferSyntaxUID"}
LEFT_GROUPS = {0x0000, 0x0002, 0x0004, 0x0028, 0x7FE0, 0x5400, 0xFFFA, 0xFFFC, 0xFFFE}


def plant_everywhere(made: Dataset) -> Dataset:
    """A token in every text field that DICOM knows, in dates and identifiers, in sequences and private fields."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        for tag, (kind, _, _, retired, keyword) in DicomDictionary.items():
            if keyword in LEFT_ALONE or tag >> 16 in LEFT_GROUPS or (retired and keyword not in PATIENT_FIELDS):
                continue
            if kind in TEXT_KINDS:
                made.add_new(tag, kind, TOKEN)
            elif kind == "DA":
                made.add_new(tag, kind, DAY)
            elif kind == "UI":
                made.add_new(tag, kind, MARKED_UID)
        inner = Dataset()
        inner.PatientName, inner.PatientComments, inner.InstitutionName = f"{TOKEN}^A", TOKEN, TOKEN
        made.ReferencedPatientSequence = [inner]
        made.OtherPatientIDsSequence = [inner]
        made.RequestAttributesSequence = [inner]
        block = made.private_block(0x0019, f"{TOKEN} PRIVATE", create=True)
        block.add_new(0x01, "LO", TOKEN)
        block.add_new(0x02, "UN", TOKEN.encode())
    return made


def dicom_folder(folder: Path, volume: np.ndarray) -> None:
    """A series of a volume (x, y, slice) with tokens everywhere, in its files' names too."""
    x, y, z = small.VOXEL
    write_series(
        folder,
        volume.astype(np.float64),
        between_columns_mm=x,
        between_rows_mm=y,
        slice_mm=z,
        change=lambda made, *_: plant_everywhere(made),
    )
    for file in sorted(folder.iterdir()):
        file.rename(file.with_name(f"{TOKEN}^{file.name}.dcm"))


def nifti(path: Path, volume: np.ndarray) -> None:
    image = nib.Nifti1Image(volume, np.diag([*small.VOXEL, 1.0]))
    for field in ("descrip", "aux_file", "db_name", "intent_name", "data_type"):
        image.header[field] = TOKEN.encode()
    for code in ("comment", "afni", "xcede", 40):
        image.header.extensions.append(nib.nifti1.Nifti1Extension(code, f"{TOKEN} <name>{TOKEN}</name>".encode()))
    path.write_bytes(gzip.compress(image.to_bytes(), mtime=0))
    people = {field: f"{TOKEN} {field}" for field in PATIENT_FIELDS}
    others = ("InstitutionName", "InstitutionAddress", "StationName", "DeviceSerialNumber", "SeriesDescription")
    others += ("OperatorsName", "ReferringPhysicianName", "AcquisitionTime", "ScanStart", TOKEN)
    people |= dict.fromkeys(others, TOKEN)
    people |= {"Units": "Bq/mL", "TracerName": "invented", "Nested": {"a": [TOKEN]}}
    small_json = path.with_name(path.name.replace(".nii.gz", ".json"))
    small_json.write_text(json.dumps(people))


def ecat(path: Path) -> None:
    """The ECAT volume that nibabel ships, with a token in every text field of its header."""
    data = bytearray((Path(nib.__file__).parent / "tests" / "data" / "tinypet.v").read_bytes())
    for field, (kind, place) in nib.ecat.EcatHeader.template_dtype.fields.items():
        if kind.kind == "S" and kind.itemsize >= len(TOKEN) and field not in ("magic_number", "data_units"):
            data[place : place + len(TOKEN)] = TOKEN.encode()
    path.write_bytes(data)


@pytest.fixture(scope="module")
def finished(tmp_path_factory):
    study_dir = small.make_study(tmp_path_factory.mktemp("private") / "study")
    images = study_dir / "images"
    (images / "mill-1.nii.gz").unlink()
    dicom_folder(images / "mill phantom", small.phantom_volume("mill-1"))
    dicom_folder(images / "series", small.scan_volume("m01"))
    nifti(images / "q01.nii.gz", small.scan_volume("q01"))
    ecat(images / "tiny.v")
    # Refused ones: a strange file, a slice too few, a broken header, a cut file, names for what is no image.
    dicom_folder(images / "strange", small.scan_volume("m01")[:, :, :4])
    (images / "strange" / f"{TOKEN}^NOTES.txt").write_text(TOKEN)
    dicom_folder(images / "short", small.scan_volume("m01")[:, :, :5])
    inner = [
        p for p in (images / "short").iterdir() if pydicom.dcmread(p, specific_tags=["ImageIndex"]).ImageIndex == 3
    ]
    inner[0].unlink()
    dicom_folder(images / "broken", small.scan_volume("m01")[:, :, :4])
    for file in (images / "broken").iterdir():
        file.write_bytes(file.read_bytes().replace(b"-31.000000", TOKEN.encode().ljust(10)))
    nifti(images / "cut.nii.gz", small.scan_volume("q02"))
    (images / "cut.nii.gz").write_bytes((images / "cut.nii.gz").read_bytes()[:-3000])
    (images / "text.nii").write_text(TOKEN * 100)
    (images / "text.par").write_text(f"# === {TOKEN}\n.    Patient name   :   {TOKEN}\n")
    rows = small.phantom_rows()
    rows[1][5] = "images/mill phantom"
    small.write_table(study_dir / "config/phantoms.tsv", small.PHANTOM_COLUMNS, rows)
    names = {"q01": "q01.nii.gz", "q02": "q02.nii.gz", "m01": "series", "e01": "tiny.v", "h01": "strange"}
    names |= {"h02": "short", "h03": "broken", "h04": "cut.nii.gz", "h05": "text.nii", "h06": "text.par"}
    setups = {"m01": "mill-1"}
    scans = [[key, "base", setups.get(key, "quay-1"), "2026-02-01", f"images/{name}"] for key, name in names.items()]
    small.write_table(study_dir / "config/scans.tsv", small.SCAN_COLUMNS, scans)
    labels = np.zeros(small.SHAPE, np.float32)
    labels[20:30, 20:30, 15:25] = 1
    nifti(images / "labels.nii.gz", labels)
    regions = [["marked", "images/labels.nii.gz", "", "", "q01"], ["ball", "", "60;60;50", "30", ""]]
    small.write_table(study_dir / "config/regions.tsv", "region image centre_mm diameter_mm subject", regions)
    run = small.snakemake(study_dir)
    assert run.code == 0, run.text
    said = run.text + small.snakemake(study_dir, "check").text + small.snakemake(study_dir, "plan").text
    for script in ("explain_run.py", "check_handover.py"):
        study = ["results/handover", "--study", "."] if script == "check_handover.py" else ["."]
        command = [sys.executable, small.PROGRAM / "scripts" / script, *study]
        done = subprocess.run(command, cwd=study_dir, capture_output=True, text=True, check=False)
        assert done.returncode == 0, done.stdout + done.stderr
        said += done.stdout + done.stderr
    return study_dir, said


PACKED = (
    "README.txt",
    "history.tsv",
    "images.tsv",
    "study.json",
    "phantoms/mill-1-points.nii.gz",
    "results/plan.html",
    "results/site_effect/site_effect.json",
    "results/site_effect/regions/sub-q01_ses-base.json",
    "results/audit/covariates.tsv",
    "results/audit/sites/mill.html",
)
EVERYWHERE = (
    "history.tsv",
    "results/plan.html",
    "results/plan.json",
    "results/plan.tsv",
    "results/site_effect/site_effect.json",
    "results/site_effect/regions/sub-q01_ses-base.json",
    "results/site_effect/regions/sub-m01_ses-base.json",
    *(
        f"results/audit/{name}"
        for name in ("audit.json", "pictures.json", "covariates.tsv", "report.html", "queries.tsv")
    ),
    *(f"results/audit/sites/{site}.{ending}" for site in ("quay", "mill", "moor") for ending in ("html", "json")),
)


def secrets() -> list[str]:
    names = [part for value in PLANTED.values() for part in value.split("^") if len(part) > 1]
    return sorted({TOKEN, DAY, MARKED_UID, *names})


def pictures(data: bytes) -> list[bytes]:
    """The pictures that stand in a page or a record."""
    return [base64.b64decode(found) for found in re.findall(rb"data:image/png;base64,([A-Za-z0-9+/=]+)", data)]


def unpacked(path: Path) -> bytes:
    """A file's bytes and name, unpacked where packed; with what its own name hides."""
    data = path.read_bytes()
    data = gzip.decompress(data) if data[:2] == b"\x1f\x8b" else data
    hidden = b"".join(pictures(data))
    if ".snakemake" in path.parts:  # Snakemake writes names of results in base 64
        letters = re.sub(r"[^A-Za-z0-9+/]", "", path.name)
        hidden += base64.b64decode(letters[: len(letters) // 4 * 4])
    return data + path.as_posix().encode() + hidden


def test_no_word_about_a_person_comes_out(finished):
    study_dir, said = finished
    own = (study_dir / "images", study_dir / "config")
    written = [p for p in study_dir.rglob("*") if p.is_file() and not any(folder in p.parents for folder in own)]
    assert len(written) > 40
    assert {"results", ".evenblur", ".snakemake"} <= {p.relative_to(study_dir).parts[0] for p in written}
    names = {path.relative_to(study_dir).as_posix() for path in written}
    assert names >= {*EVERYWHERE, *(f"results/handover/data/{name}" for name in PACKED)}
    found = [
        (secret, path.relative_to(study_dir).as_posix())
        for path in written
        for secret in secrets()
        if secret.lower().encode() in unpacked(path).lower()
    ]
    assert found == []
    assert [secret for secret in secrets() if secret.lower() in said.lower()] == []


def test_pictures_hold_pixels_and_no_text(finished):
    study_dir, _ = finished
    found = [
        png for name in ("report.html", "sites/mill.html", "pictures.json") for png in audit_pictures(study_dir, name)
    ]
    assert len(found) > 10
    for png in found:
        place, kinds = 8, []
        while place < len(png):  # a chunk: length, kind, data, check sum (PNG specification, 5.3)
            kinds.append(png[place + 4 : place + 8])
            place += 12 + int.from_bytes(png[place : place + 4])
        assert set(kinds) <= {b"IHDR", b"PLTE", b"IDAT", b"IEND"}


def audit_pictures(study_dir: Path, name: str) -> list[bytes]:
    return pictures((study_dir / "results/audit" / name).read_bytes())


def test_the_tokens_do_stand_in_the_images(finished):
    study_dir, _ = finished
    slices = sorted((study_dir / "images/series").iterdir())
    header = pydicom.dcmread(slices[0], stop_before_pixels=True)
    assert sum(TOKEN in str(element.value) for element in header) > 500
    assert gzip.decompress((study_dir / "images/q01.nii.gz").read_bytes()).count(TOKEN.encode()) >= 9
    assert (study_dir / "images/tiny.v").read_bytes().count(TOKEN.encode()) >= 6


def table(study_dir: Path, name: str) -> list[dict[str, str]]:
    with (study_dir / "results/audit" / name).open(newline="") as stream:
        return list(csv.DictReader(stream, delimiter="\t"))


def test_fields_about_the_patient_are_counted_and_asked_about(finished):
    study_dir, _ = finished
    scans = {row["subject"]: row for row in table(study_dir, "scans.tsv")}
    assert {key for key, row in scans.items() if "patient_fields" in row["flags"]} >= {"q01", "m01", "e01"}
    assert "patient_fields" not in scans["q02"]["flags"]
    assert scans["m01"]["status"] == scans["q01"]["status"] == "accepted"
    assert {scans[f"h0{k}"]["status"] for k in range(1, 7)} == {"held"}
    asked = {row["item"]: row["sentence"] for row in table(study_dir, "queries.tsv") if row["code"] == "patient_fields"}
    # Every one but the time of birth, which holds no text.
    assert f"{len(PATIENT_FIELDS) - 1} header fields tell who the patient is" in asked["sub-m01_ses-base"]
    assert "mill-1-points" in asked
