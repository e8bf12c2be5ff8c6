"""A slice before and after smoothing as two small pictures on one scale, for reports.

As in `phantoms/pictures.py`: whole voxels, at most 96 a side, every second, third ... voxel of a larger slice.
"""

import base64
from math import ceil
from typing import Any

import numpy as np
from numpy.typing import NDArray

from evenblur.phantoms.pictures import LARGEST_SIDE

Array = NDArray[np.float64]

_EDGE_SHARE = 0.05  # of the shown range: what lies below counts as surroundings when a picture is cut to its object
_MARGIN = 4  # pixels left about the object


def pair_record(
    before: Array, after: Array, *, pixel_mm: tuple[float, float], label: str, cut: bool = False, whole: bool = False
) -> dict[str, Any]:
    """A slice before and after as records keep it: 8-bit greys on one scale.

    Parameters
    ----------
    before, after
        The slice, shape (height, width), row 0 at the top; any unit, NaN where there is no value.
    pixel_mm
        Distance between pixels across and down, mm.
    label
        What slice it is.
    cut
        Leave surroundings away that hold next to nothing before smoothing.
    whole
        White is the largest value: for small bright objects, which half a per cent would swallow.

    Returns
    -------
    dict
        `before` and `after` (base64 text of unsigned bytes, row by row), `width`, `height`, `width_mm`, `height_mm`,
        `low` and `high`: the values of grey 0 and 255, nothing or the lowest 0.5 % and the highest 0.5 % of the slice
        before smoothing.

    Raises
    ------
    ValueError
        If the two have different shapes.

    Examples
    --------
    >>> sharp = np.array([[0.0, 0.0, 4.0, 0.0]])
    >>> found = pair_record(sharp, sharp / 2, pixel_mm=(2.0, 2.0), label="Slice 1 of 1")
    >>> list(base64.b64decode(found["after"])), found["width_mm"]
    ([0, 0, 129, 0], 8.0)
    """
    if before.shape != after.shape or before.ndim != 2:
        raise ValueError(f"two slices of one shape are needed, not {before.shape} and {after.shape}")
    finite = before[np.isfinite(before)]
    low, high = np.percentile(finite, [0.5, 100.0 if whole else 99.5]) if finite.size else (0.0, 0.0)
    low = min(float(low), 0.0)
    high = float(high) if high > low else low + 1.0
    rows, columns = (slice(0, count) for count in before.shape)
    if cut:
        inside = np.nan_to_num(before, nan=low) > low + _EDGE_SHARE * (high - low)
        rows, columns = (_bounds(np.asarray(inside.any(axis=axis))) for axis in (1, 0))
    step = max(ceil((part.stop - part.start) / LARGEST_SIDE) for part in (rows, columns))
    shown = [image[rows, columns][::step, ::step] for image in (before, after)]
    height, width = shown[0].shape
    return {
        "label": label,
        "width": width,
        "height": height,
        "width_mm": round(width * step * pixel_mm[0], 3),
        "height_mm": round(height * step * pixel_mm[1], 3),
        "low": float(f"{low:.6g}"),
        "high": float(f"{high:.6g}"),
        **{
            name: _greys(255.0 * (image - low) / (high - low))
            for name, image in zip(("before", "after"), shown, strict=True)
        },
    }


def _bounds(inside: NDArray[np.bool_]) -> slice:
    found = np.flatnonzero(inside)
    if found.size == 0:
        return slice(0, inside.size)
    return slice(max(int(found[0]) - _MARGIN, 0), min(int(found[-1]) + 1 + _MARGIN, inside.size))


def _greys(levels: Array) -> str:
    known = np.clip(np.nan_to_num(levels, nan=0.0), 0.0, 255.0)
    return base64.b64encode(np.rint(known).astype(np.uint8).tobytes()).decode("ascii")


def phantom_pair(before: Array, after: Array, *, voxel_mm: tuple[float, float, float], kind: str) -> dict[str, Any]:
    """A phantom before and after smoothing, in the view that shows its kind best.

    Sources and lines: the largest value along the bed. Cylinders: the coronal slice nearest to the middle of the
    activity, for it shows wall and ends. Other objects: the axial slice with the most structure before smoothing.

    Parameters
    ----------
    before, after
        Volumes, shape (x, y, axial), any unit.
    voxel_mm
        Voxel sizes, mm.
    kind
        Kind of phantom.

    >>> ball = np.zeros((5, 5, 4)); ball[2, 2, 1] = 1.0
    >>> phantom_pair(ball, ball, voxel_mm=(2.0, 2.0, 3.0), kind="hot_spheres")["label"]
    'Axial slice 2 of 4'
    """
    dx, dy, dz = voxel_mm
    before, after = np.asarray(before, dtype=float), np.asarray(after, dtype=float)
    if kind in ("point_source", "line_source"):
        views = [np.max(np.nan_to_num(volume, nan=-np.inf), axis=2).T[::-1] for volume in (before, after)]
        return pair_record(*views, pixel_mm=(dx, dy), label="Largest value along the bed", cut=True, whole=True)
    if kind == "uniform_cylinder":
        activity = np.clip(np.nan_to_num(before), 0.0, None).sum(axis=(0, 2))
        at = round(float(np.average(np.arange(activity.size), weights=activity))) if activity.sum() > 0 else 0
        views = [volume[:, at, :].T[::-1] for volume in (before, after)]
        label = f"Coronal slice {at + 1} of {before.shape[1]}"
        return pair_record(*views, pixel_mm=(dx, dz), label=label, cut=True)
    at = int(np.argmax(np.nan_to_num(before).var(axis=(0, 1))))
    views = [volume[:, :, at].T[::-1] for volume in (before, after)]
    return pair_record(*views, pixel_mm=(dx, dy), label=f"Axial slice {at + 1} of {before.shape[2]}", cut=True)
