"""Take in one image: can it be read, is it a volume, are its geometry and values sound. One record an image."""

from collections.abc import Iterable
from pathlib import Path
from typing import Any

from evenblur.errors import InputError
from evenblur.images.digests import image_sha256
from evenblur.images.facts import reconstruction_facts, stated_radionuclide, stated_units
from evenblur.images.findings import Finding
from evenblur.images.geometry_checks import geometry_findings
from evenblur.images.identity import count_patient_fields
from evenblur.images.reading import Image, open_image
from evenblur.images.sidecars import is_harmonised
from evenblur.images.value_checks import Values, look_at_values, value_findings
from evenblur.images.writing import bears_mark

_FIELDS = (
    "shape",
    "frames",
    "voxel_mm",
    "axial_axis",
    "oblique_deg",
    "units",
    "radionuclide",
    "reconstruction",
    "minimum",
    "maximum",
    "nan_share",
    "negative_share",
    "total_ml",
)


def take_in_image(path: Path, *, name: str, item: str, key: str, expected_sha256: str | None = None) -> dict[str, Any]:
    """Look at an image and say what it is and whether it can be used.

    Parameters
    ----------
    path
        The image file.
    name
        Its path as the user's table has it.
    item, key
        `scan` or `phantom`, and its label.
    expected_sha256
        The identity that the run planned with, or `missing` or `unreadable`; None to take the file as it is.

    Returns
    -------
    dict
        The intake record: identity, geometry, value range, `holds` (codes), `problems` (sentences), `flags`.

    Raises
    ------
    InputError
        If the file changed since the run planned with it. Every other fault is a record with a reason.
    """
    record: dict[str, Any] = {"item": item, "key": key, "path": name, "sha256": None, "voxels_sha256": None}
    record |= dict.fromkeys(_FIELDS)
    record |= {"holds": [], "problems": [], "flags": []}
    try:
        _look_for(path, name, expected_sha256)
        record["sha256"] = image_sha256(path)
        if expected_sha256 is not None and record["sha256"] != expected_sha256:
            raise InputError(name, "the image changed during the run", "run again")
        if is_harmonised(path):
            raise _harmonised(name, "its sidecar")
        image = open_image(path, name=name)
        if bears_mark(image):
            raise _harmonised(name, "its header")
        _enter(record, _patient_findings(image, path))
        record |= _geometry(image, path)
        values = look_at_values(image)
        record |= _values(values, image)
    except InputError as error:
        if error.code is None:
            raise
        _enter(record, [Finding(error.code, f"{error.what}; {error.mend}", holds=True)])
    except OSError as error:
        text = f"cannot be read ({error.strerror}); mend its permissions"
        _enter(record, [Finding("image_unreadable", text, holds=True)])
    else:
        _enter(record, geometry_findings(image))
        _enter(record, value_findings(values, axial_axis=image.grid.axial_axis, scan=item == "scan"))
        if item == "scan" and record["units"] is None:
            _enter(record, [Finding("units_unstated", "neither sidecar nor header states the unit of the values")])
    return record


def _look_for(path: Path, name: str, expected: str | None) -> None:
    """See that the file is as the run planned with it: a file that comes or goes meanwhile is for the next run."""
    if expected == "missing" or (expected is None and not path.exists()):
        raise InputError(name, "the file is missing", "send it, or correct the path in the table", "image_missing")
    if expected == "unreadable":
        raise InputError(name, "the file may not be read", "mend its permissions", "image_unreadable")
    if not path.exists():
        raise InputError(name, "the image vanished during the run", "run again")


def _harmonised(name: str, who: str) -> InputError:
    wrong = f"{who} says that it was smoothed for a pooled study already"
    return InputError(name, wrong, "send the image as it was reconstructed", "already_harmonised")


def _patient_findings(image: Image, path: Path) -> list[Finding]:
    """Say how many header fields tell who the patient is; what they hold goes nowhere."""
    count = count_patient_fields(image.source, path)
    if not count:
        return []
    fields = "1 header field tells" if count == 1 else f"{count} header fields tell"
    return [Finding("patient_fields", f"{fields} who the patient is", value=count)]


def _geometry(image: Image, path: Path) -> dict[str, Any]:
    grid = image.grid
    return {
        "shape": list(grid.shape),
        "frames": image.frames,
        "voxel_mm": list(grid.voxel_mm),
        "axial_axis": grid.axial_axis,
        "oblique_deg": grid.oblique_deg,
        "units": stated_units(image, path),
        "radionuclide": stated_radionuclide(image, path),
        "reconstruction": reconstruction_facts(image, path),
    }


def _values(values: Values, image: Image) -> dict[str, Any]:
    return {
        "voxels_sha256": values.voxels_sha256,
        "minimum": values.minimum,
        "maximum": values.maximum,
        "nan_share": round(values.missing / values.voxels, 6),
        "negative_share": round(values.negative / values.voxels, 6),
        "total_ml": values.total * image.grid.voxel_ml,
    }


def _enter(record: dict[str, Any], findings: Iterable[Finding]) -> None:
    for found in findings:
        if found.holds:
            record["holds"].append(found.code)
            record["problems"].append(found.text)
        else:
            record["flags"].append(found.flag())
