"""The sidecar (`.json`) beside a scan: which of its fields the harmonised image inherits."""

import json
import math
from pathlib import Path
from typing import Any

from evenblur.images.plain_files import check_plain_file

LARGEST_SIDECAR = 4 << 20
"""A sidecar beyond this is none."""

_LONGEST_TEXT = 1000
_DEEPEST_LIST = 3
_LARGEST_INTEGER = 1 << 53  # beyond it readers of JSON disagree

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

    One that is larger than any sidecar, nested beyond measure or no plain file counts as none.

    >>> read_sidecar(Path("nowhere.nii"))
    {}
    """
    path = sidecar_path(image)
    try:
        check_plain_file(path)
        if path.stat().st_size > LARGEST_SIDECAR:
            return {}
        given = json.loads(path.read_text(encoding="utf-8-sig"))
    except (OSError, ValueError, RecursionError):
        return {}
    return given if isinstance(given, dict) else {}


def _plain(value: Any, *, depth: int = 0) -> bool:
    """Whether a value may go into a record: printable text of some length, finite numbers, lists of these."""
    if isinstance(value, list):
        return depth < _DEEPEST_LIST and all(_plain(item, depth=depth + 1) for item in value)
    if isinstance(value, str):
        return len(value) <= _LONGEST_TEXT and " ".join(value.split()).isprintable()
    if isinstance(value, float):
        return math.isfinite(value)
    return isinstance(value, bool) or (isinstance(value, int) and abs(value) <= _LARGEST_INTEGER)
