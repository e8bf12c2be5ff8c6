"""Take in one image: can it be read, is it a volume, are its values sound. One record an image."""

import hashlib
from pathlib import Path
from typing import Any

import numpy as np

from evenblur.errors import InputError
from evenblur.images.digests import image_sha256
from evenblur.images.identity import count_patient_fields
from evenblur.images.reading import Image, open_image
from evenblur.images.sidecars import RECONSTRUCTION_FIELDS, inherited_fields, is_harmonised
from evenblur.images.streaming import iter_frames_float32

NEGATIVE_DEPTH = 0.1
"""A minimum further below zero than this share of the maximum is flagged."""


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
    record |= dict.fromkeys(("shape", "frames", "voxel_mm", "axial_axis", "oblique_deg", "units", "reconstruction"))
    record |= dict.fromkeys(("minimum", "maximum", "nan_share", "negative_share", "total_ml"))
    record |= {"holds": [], "problems": [], "flags": []}
    try:
        _look_for(path, name, expected_sha256)
        record["sha256"] = image_sha256(path)
        if expected_sha256 is not None and record["sha256"] != expected_sha256:
            raise InputError(name, "the image changed during the run", "run again")
        if item == "scan" and is_harmonised(path):
            wrong = "its sidecar says that it was smoothed for a pooled study already"
            raise InputError(name, wrong, "send the image as it was reconstructed", "already_harmonised")
        image = open_image(path, name=name)
        _look_for_patient(record, image, path)
        record |= _geometry(image, path)
        record |= _values(image)
    except InputError as error:
        if error.code is None:
            raise
        _hold(record, error.code, f"{error.what}; {error.mend}")
    except OSError as error:
        _hold(record, "image_unreadable", f"cannot be read ({error.strerror}); mend its permissions")
    else:
        _judge(record)
    return record


def _look_for(path: Path, name: str, expected: str | None) -> None:
    """See that the file is as the run planned with it: a file that comes or goes meanwhile is for the next run."""
    if expected == "missing" or (expected is None and not path.exists()):
        raise InputError(name, "the file is missing", "send it, or correct the path in the table", "image_missing")
    if expected == "unreadable":
        raise InputError(name, "the file may not be read", "mend its permissions", "image_unreadable")
    if not path.exists():
        raise InputError(name, "the image vanished during the run", "run again")


def _look_for_patient(record: dict[str, Any], image: Image, path: Path) -> None:
    """Say how many header fields tell who the patient is; what they hold goes nowhere."""
    count = count_patient_fields(image.source, path)
    if count:
        fields = "1 header field tells" if count == 1 else f"{count} header fields tell"
        _flag(record, "patient_fields", f"{fields} who the patient is", count)


def _hold(record: dict[str, Any], code: str, sentence: str) -> None:
    record["holds"].append(code)
    record["problems"].append(sentence)


def _geometry(image: Image, path: Path) -> dict[str, Any]:
    grid = image.grid
    facts = {**image.sidecar_fields, **inherited_fields(path)}
    return {
        "shape": list(grid.shape),
        "frames": image.frames,
        "voxel_mm": list(grid.voxel_mm),
        "axial_axis": grid.axial_axis,
        "oblique_deg": grid.oblique_deg,
        "units": facts.get("Units"),
        "reconstruction": {name: facts[name] for name in RECONSTRUCTION_FIELDS if name in facts},
    }


def _values(image: Image) -> dict[str, Any]:
    """Value range, shares and the voxels' hash, read frame by frame and to the end as the smoothing reads them."""
    digest = hashlib.sha256()
    low, high, total = np.inf, -np.inf, 0.0
    missing = negative = voxels = 0
    for frame in iter_frames_float32(image):
        digest.update(frame.astype("<f4", copy=False).tobytes(order="F"))
        finite = frame[np.isfinite(frame)]
        missing += frame.size - finite.size
        negative += int((finite < 0).sum())
        voxels += frame.size
        if finite.size:
            low, high = min(low, float(finite.min())), max(high, float(finite.max()))
            total += float(finite.sum(dtype=np.float64))
    return {
        "voxels_sha256": digest.hexdigest(),
        "minimum": low if np.isfinite(low) else None,
        "maximum": high if np.isfinite(high) else None,
        "nan_share": round(missing / voxels, 6),
        "negative_share": round(negative / voxels, 6),
        "total_ml": total * image.grid.voxel_ml,
    }


def _judge(record: dict[str, Any]) -> None:
    if record["minimum"] is None:
        _hold(record, "image_not_finite", "holds no value at all; export it again")
    elif record["minimum"] == record["maximum"] == 0:
        _hold(record, "image_zero", "every voxel has the value zero; export it again")
    if record["nan_share"] > 0:
        share = 100 * record["nan_share"]
        _flag(record, "nan_voxels", f"{share:.1f} % of the voxels have no value", record["nan_share"])
    low, high = record["minimum"], record["maximum"]
    # Noise around an empty background is negative half of the time; values this far below zero are not noise.
    if low is not None and high is not None and low < -NEGATIVE_DEPTH * max(high, 0.0):
        share = 100 * record["negative_share"]
        _flag(record, "negative_voxels", f"{share:.1f} % of the voxels are negative, down to {low:.3g}", low)


def _flag(record: dict[str, Any], code: str, text: str, value: float | None) -> None:
    record["flags"].append({"code": code, "text": text, "value": value})
