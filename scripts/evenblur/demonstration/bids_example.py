"""A small BIDS data set of three invented sites, as a coordinating centre may find it before a study begins.

It has what such data sets have: a `site` column, a phantom that travels (its sessions are named after the sites), and
gaps: nobody wrote down what the phantom is, and the date of one scan is shifted to hide it.
"""

import json
import os
import shutil
from pathlib import Path
from typing import Any

from evenblur.command import write_text
from evenblur.demonstration.make import phantom_volume, scan_frames, write_image
from evenblur.demonstration.scenario import GEOMETRIES, Cylinder, PhantomImage, ScanImage
from evenblur.errors import InputError

_SETUPS = {"quay": ("quay-1", "q1-winter"), "mill": ("mill-1", "m1-winter"), "fern": ("fern-2", "f2-spring")}
"""The demonstration's setup and its state that each site of the example has."""

CYLINDER = Cylinder(98.0, 112.0, (1.7, -2.3, 0.9), 2.4, 60.0)
"""The phantom that all three sites scanned."""

_PHANTOM_DAYS = {"quay": "2026-01-12", "mill": "2026-01-20", "fern": "2026-02-02"}
_SUBJECTS = (
    ("quay01", "quay", "2026-02-03"),
    ("quay02", "quay", "2026-02-10"),
    ("mill01", "mill", "2026-02-05"),
    ("mill02", "mill", "1911-05-17"),  # shifted to hide the day
    ("fern01", "fern", "2026-02-24"),
    ("fern02", "fern", "2026-03-03"),
)
_SCANNERS = {
    "quay": ("Talvik 3", "ordered subsets", [4, 8], "Gaussian", 5.0),
    "mill": ("Ondel 64", "ordered subsets", [3, 12], "Gaussian", 6.0),
    "fern": ("Veyl Duo", "filtered back-projection", None, "Hann", 6.0),
}
_README = """\
Invented example of a PET data set pooled from three sites.

Everything in it is invented: sites, scanners, subjects, dates, images. It is made by the program that it is an example
for. The subject phantom1 is a filled cylinder of 98 mm radius and 112 mm length that travelled from site to site.
"""


def make_bids_example(folder: Path) -> tuple[int, int]:
    """Write the data set.

    Parameters
    ----------
    folder
        The data set's folder; it must not be there yet, or be empty.

    Returns
    -------
    tuple of int
        How many scans of subjects and of the phantom it has.

    Raises
    ------
    InputError
        If the folder holds something.

    >>> make_bids_example(Path("bids"))  # doctest: +SKIP
    (6, 3)
    """
    if folder.exists() and (not folder.is_dir() or any(folder.iterdir())):
        raise InputError(str(folder), "is there already and is never overwritten", "name a new folder")
    draft = folder.with_name(f".{folder.name}.{os.getpid()}.part")
    try:
        _write_whole(draft)
        draft.replace(folder)
    finally:
        shutil.rmtree(draft, ignore_errors=True)
    return len(_SUBJECTS), len(_PHANTOM_DAYS)


def _write_whole(folder: Path) -> None:
    description = {
        "Name": "Invented three-site example",
        "BIDSVersion": "1.11.1",
        "DatasetType": "raw",
        "License": "CC0",
        "Authors": ["Invented Example"],
    }
    write_text(folder / "dataset_description.json", _json(description))
    write_text(folder / "README", _README)
    rows = [f"sub-{subject}\t{site}" for subject, site, _ in _SUBJECTS]
    write_text(folder / "participants.tsv", "\n".join(["participant_id\tsite", "sub-phantom1\tn/a", *rows]) + "\n")
    columns = {"site": {"Description": "Site that scanned the subject (invented)"}}
    write_text(folder / "participants.json", _json(columns))
    for site, day in _PHANTOM_DAYS.items():
        setup, state = _SETUPS[site]
        phantom = PhantomImage(f"example-{site}", setup, state, "uniform_cylinder", CYLINDER, 0.05)
        _write_scan(folder, "phantom1", site, site, day, phantom_volume(phantom)[..., None], setup)
    for subject, site, day in _SUBJECTS:
        setup, state = _SETUPS[site]
        frames = scan_frames(ScanImage(subject, "base", setup, state, "cortical"))
        _write_scan(folder, subject, "base", site, day, frames, setup)


def _write_scan(folder: Path, subject: str, session: str, site: str, day: str, frames: Any, setup: str) -> None:
    stem = f"sub-{subject}_ses-{session}"
    place = folder / f"sub-{subject}" / f"ses-{session}"
    write_image(frames, GEOMETRIES[setup], place / "pet" / f"{stem}_pet.nii.gz")
    write_text(place / "pet" / f"{stem}_pet.json", _json(_sidecar(site, phantom=subject == "phantom1")))
    write_text(place / f"{stem}_scans.tsv", f"filename\tacq_time\npet/{stem}_pet.nii.gz\t{day}T10:30:00\n")


def _sidecar(site: str, *, phantom: bool) -> dict[str, Any]:
    """The fields that BIDS 1.11 requires of a PET image, and a few that it recommends."""
    scanner, method, parameters, filter_type, filter_mm = _SCANNERS[site]
    return {
        "Manufacturer": "Invented",
        "ManufacturersModelName": scanner,
        "InstitutionName": f"{site.capitalize()} Imaging (invented)",
        "BodyPart": "phantom" if phantom else "brain",
        "Units": "Bq/mL",
        "TracerName": "invented" if not phantom else "fluoride in water",
        "TracerRadionuclide": "F18",
        "InjectedRadioactivity": 60.0 if phantom else 180.0,
        "InjectedRadioactivityUnits": "MBq",
        "InjectedMass": 1.0,
        "InjectedMassUnits": "ug",
        "SpecificRadioactivity": 60000.0,
        "SpecificRadioactivityUnits": "MBq/g",
        "ModeOfAdministration": "bolus",
        "TimeZero": "10:30:00",
        "ScanStart": 0,
        "InjectionStart": 0,
        "FrameTimesStart": [0],
        "FrameDuration": [1200],
        "AcquisitionMode": "list mode",
        "ImageDecayCorrected": True,
        "ImageDecayCorrectionTime": 0,
        "ReconMethodName": method,
        "ReconMethodParameterLabels": ["iterations", "subsets"] if parameters else ["none"],
        **(
            {"ReconMethodParameterUnits": ["none", "none"], "ReconMethodParameterValues": parameters}
            if parameters
            else {}
        ),
        "ReconFilterType": filter_type,
        "ReconFilterSize": filter_mm,
        "AttenuationCorrection": "measured",
    }


def _json(content: dict[str, Any]) -> str:
    return json.dumps(content, indent=2) + "\n"
