"""The sidecar (`.json`) beside a scan: which of its fields the harmonised image inherits."""

import json
import math
from pathlib import Path
from typing import Any

INHERITED_FIELDS = (
    "Units",
    "TracerName",
    "TracerRadionuclide",
    "ModeOfAdministration",
    "AcquisitionMode",
    "ImageDecayCorrected",
    "FrameTimesStart",
    "FrameDuration",
    "AttenuationCorrection",
    "ScatterCorrectionMethod",
    "RandomsCorrectionMethod",
    "ReconMethodName",
    "ReconMethodParameterLabels",
    "ReconMethodParameterUnits",
    "ReconMethodParameterValues",
    "ReconFilterType",
    "ReconFilterSize",
)
"""Fields about tracer, frames and reconstruction. Times of day, doses, names of persons, places and devices are not
among them: none of those is needed to read the image, and together they point to a person."""

RECONSTRUCTION_FIELDS = (
    "ReconMethodName",
    "ReconMethodParameterLabels",
    "ReconMethodParameterValues",
    "ReconFilterType",
    "ReconFilterSize",
)
"""Fields that describe the reconstruction."""


def sidecar_path(image: Path) -> Path:
    """The sidecar's path: the image's name with `.json` for its `.nii`, `.nii.gz` or other ending.

    >>> sidecar_path(Path("a/sub-1_pet.nii.gz")).as_posix()
    'a/sub-1_pet.json'
    """
    name = image.name
    for ending in (".gz", ".nii"):
        if name.lower().endswith(ending):
            name = name[: -len(ending)]
    return image.with_name((name if name != image.name else image.stem) + ".json")


def inherited_fields(image: Path) -> dict[str, Any]:
    """Fields that the harmonised image takes over from the scan's sidecar; empty where there is none.

    A sidecar that is no JSON object, and fields that are neither text, numbers nor lists of these, count as not there:
    they describe the image and do not decide about it.

    Parameters
    ----------
    image
        The scan's path.

    >>> inherited_fields(Path("nowhere.nii"))
    {}
    """
    given = read_sidecar(image)
    return {field: given[field] for field in INHERITED_FIELDS if field in given and _plain(given[field])}


def is_harmonised(image: Path) -> bool:
    """Whether the sidecar beside an image is a record of this program: such an image must not be smoothed again."""
    return "Evenblur" in read_sidecar(image)


def read_sidecar(image: Path) -> dict[str, Any]:
    """The sidecar beside an image as it stands; empty where there is none that is a JSON object.

    >>> read_sidecar(Path("nowhere.nii"))
    {}
    """
    try:
        given = json.loads(sidecar_path(image).read_text(encoding="utf-8-sig"))
    except (OSError, ValueError, RecursionError):
        return {}
    return given if isinstance(given, dict) else {}


def _plain(value: Any) -> bool:
    if isinstance(value, list):
        return all(_plain(item) for item in value)
    if isinstance(value, float):
        return math.isfinite(value)
    return isinstance(value, str | int | bool)
