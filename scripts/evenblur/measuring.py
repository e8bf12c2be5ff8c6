"""Measure one phantom image: from the file to the record of its widths."""

import importlib
import math
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

import evenblur
from evenblur.errors import InputError
from evenblur.images.digests import image_sha256
from evenblur.images.reading import Image, open_image
from evenblur.measuring_kinds import KIND_MODULES
from evenblur.phantoms.base import Measurement, MeasurementError, Width


@dataclass(frozen=True)
class PhantomVolume:
    """A phantom image as the kinds want it: axes (x, y, axial), x and y as near to the world's as they go.

    Attributes
    ----------
    volume
        3-D float64; the mean over the frames where there are several.
    voxel_mm
        Voxel size along x, y and the bed, mm.
    """

    volume: np.ndarray
    voxel_mm: tuple[float, float, float]


def phantom_volume(image: Image) -> PhantomVolume:
    """Bring an opened image into the order (x, y, axial), each axis ascending with the world's.

    Raises
    ------
    InputError
        If the file's voxels cannot be read.
    """
    total = image.frame(0)
    for index in range(1, image.frames):
        total = total + image.frame(index)
    volume = total / image.frames
    grid = image.grid
    affine = np.asarray(image.source.affine, dtype=float)[:3, :3]
    first, second = grid.in_plane_axes
    if abs(affine[0, second]) > abs(affine[0, first]):
        first, second = second, first
    order = (first, second, grid.axial_axis)
    flips = tuple(axis for axis, array_axis in enumerate(order) if affine[axis, array_axis] < 0)
    arranged = np.flip(np.transpose(volume, order), flips)
    x, y, axial = (grid.voxel_mm[axis] for axis in order)
    return PhantomVolume(np.ascontiguousarray(arranged), (x, y, axial))


def measure_volume(kind: str, phantom: PhantomVolume, details: Mapping[str, Any]) -> Measurement:
    """Measure a phantom volume with the module of its kind.

    Raises
    ------
    MeasurementError
        If the volume does not show what the kind promises.
    InputError
        If the kind is not known.
    """
    if kind not in KIND_MODULES:
        raise InputError(kind, "this kind of phantom cannot be measured", f"known: {', '.join(sorted(KIND_MODULES))}")
    module = importlib.import_module(KIND_MODULES[kind])
    try:
        with np.errstate(all="ignore"):
            found: Measurement = module.measure(phantom.volume, voxel_mm=phantom.voxel_mm, details=dict(details))
    except (ArithmeticError, np.linalg.LinAlgError) as error:
        raise MeasurementError("the image's values are beyond what can be computed with") from error
    return found


def load_details(
    details: Mapping[str, Any], study_dir: Path = Path(), *, expected_sha256: str | None = None
) -> dict[str, Any]:
    """The details of a phantom with the reference volume, where there is one, in place of its path.

    Parameters
    ----------
    details
        As the table of phantoms has them.
    study_dir
        The folder that the reference's path is relative to.
    expected_sha256
        The identity that the reference must have; None to take it as it is.

    Raises
    ------
    InputError
        If the reference cannot be read, or changed since the run planned with it.
    """
    loaded = dict(details)
    if "reference" in loaded:
        name = str(loaded.pop("reference"))
        path = study_dir / name
        if expected_sha256 is not None and path.exists() and image_sha256(path) != expected_sha256:
            raise InputError(name, "the reference changed during the run", "run again")
        reference = phantom_volume(open_image(path, name=name))
        loaded["reference_volume"] = reference.volume
        loaded["reference_voxel_mm"] = reference.voxel_mm
    return loaded


def measure_phantom(
    path: Path,
    *,
    kind: str,
    details: Mapping[str, Any],
    name: str | None = None,
    expected_sha256: str | None = None,
    expected_reference_sha256: str | None = None,
    labels: Mapping[str, str] | None = None,
    tolerant: bool = False,
    study_dir: Path = Path(),
) -> dict[str, Any]:
    """Measure a phantom's image file.

    Parameters
    ----------
    path
        The image.
    kind, details
        Kind of phantom and its facts, as in the table of phantoms.
    name
        Its path as the user's table has it.
    expected_sha256
        The identity that the run planned with; None to take the file as it is.
    expected_reference_sha256
        The same for the reference that the details name.
    labels
        `phantom`, `setup`, `phantom_session` for the record.
    tolerant
        Whether an image that gives no width becomes a record with a flag instead of an error.

    study_dir
        The folder that a reference's path is relative to.

    Returns
    -------
    dict
        The resolution record; widths and standard errors are rounded to 0.0001 mm.

    Raises
    ------
    InputError
        If the image cannot be used and `tolerant` is False, or if it changed since the run planned with it.
    """
    name = name or str(path)
    labels = labels or {}
    sha256 = image_sha256(path) if path.exists() else None
    if expected_sha256 is not None and sha256 != expected_sha256:
        raise InputError(name, "the image changed during the run", "run again")
    try:
        loaded = load_details(details, study_dir, expected_sha256=expected_reference_sha256)
        measurement = measure_volume(kind, phantom_volume(open_image(path, name=name)), loaded)
    except MeasurementError as error:
        if not tolerant:
            raise InputError(name, str(error), "look at the image, the kind and the details") from error
        measurement = Measurement(None, None)
        flags = [{"code": "phantom_unusable", "text": str(error), "value": None}]
    except InputError as error:
        if not tolerant or error.code is None:  # without a code it is no fault of the image: it changed meanwhile
            raise
        measurement = Measurement(None, None)
        flags = [{"code": "phantom_unusable", "text": f"{error.what}; {error.mend}", "value": None}]
    else:
        flags = [{"code": f.code, "text": f.text, "value": plain(f.value)} for f in measurement.flags]
    return {
        "phantom": labels.get("phantom", ""),
        "setup": labels.get("setup", ""),
        "phantom_session": labels.get("phantom_session", ""),
        "kind": kind,
        "in_plane": width_record(measurement.in_plane),
        "axial": width_record(measurement.axial),
        "flags": flags,
        "fit": plain(measurement.fit),
        "input": {"path": name, "sha256": sha256, **_reference_identity(details, study_dir)},
        "method": {"name": kind, "version": evenblur.__version__},
    }


def _reference_identity(details: Mapping[str, Any], study_dir: Path) -> dict[str, str]:
    path = study_dir / str(details.get("reference", ""))
    try:
        return {"reference_sha256": image_sha256(path)} if "reference" in details else {}
    except OSError:  # there is none, or none that can be read: the flags say so
        return {}


def width_record(width: Width | None) -> dict[str, float | None] | None:
    """A width as records keep it: to 0.0001 mm."""
    if width is None:
        return None
    return {
        "fwhm_mm": round(float(width.fwhm_mm), 4),
        "se_mm": None if width.se_mm is None else round(float(width.se_mm), 4),
        "df": None if width.df is None else round(float(width.df), 2),
    }


def plain(value: Any) -> Any:
    """Plain JSON values from a fit's: numbers to six significant digits, null for what is not finite."""
    if isinstance(value, Mapping):
        return {str(key): plain(part) for key, part in value.items()}
    if isinstance(value, np.ndarray):
        return plain(value.tolist())
    if isinstance(value, list | tuple):
        return [plain(part) for part in value]
    if isinstance(value, bool | np.bool_):
        return bool(value)
    if isinstance(value, int | np.integer):
        return int(value)
    if isinstance(value, float | np.floating):
        return float(f"{value:.6g}") if math.isfinite(value) else None
    return value
