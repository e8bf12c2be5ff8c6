"""Small pictures of a fit for the report: a slice as measured, as fitted, and the difference of both.

A picture holds whole voxels, at most 96 a side: a larger slice is shown by every second, third ... voxel, without
averaging, so that the noise looks as it is.
"""

import base64
from collections.abc import Sequence
from dataclasses import dataclass
from math import ceil
from typing import Any

import numpy as np
from numpy.typing import NDArray

LARGEST_SIDE = 96
"""Pixels a side, at most: three pictures of a slice then take under 40 kB of a record."""

DIFFERENCE_STEPS = (0.05, 0.1, 0.2, 0.5, 1.0)
"""Shares of the shown range that a picture of the difference may span: few, so that pictures compare."""

_MIDDLE = 128  # the grey of no difference
_HALF = 127


@dataclass(frozen=True)
class Plane:
    """A slice to be shown: `index`, shape (height, width, 3), holds each pixel's voxel; row 0 is the top.

    `pixel_mm` is the distance between two pixels across and down.
    """

    plane: str
    label: str
    index: NDArray[np.intp]
    pixel_mm: tuple[float, float]

    @property
    def voxels(self) -> NDArray[np.intp]:
        """The pixels' voxels one after the other, shape (height * width, 3)."""
        return self.index.reshape(-1, 3)


def slice_through(
    shape: tuple[int, ...],
    *,
    plane: str,
    voxel_mm: tuple[float, float, float],
    middle: Sequence[float],
    low: Sequence[float],
    high: Sequence[float],
) -> Plane:
    """A slice through an object: axial with x across and y up, or coronal with x across and z up.

    Parameters
    ----------
    shape
        Shape of the volume, (x, y, z).
    plane
        "axial" or "coronal".
    voxel_mm
        Voxel sizes, mm.
    middle
        The object's middle as voxel numbers (x, y, z), not rounded: the slice goes through the nearest voxel.
    low, high
        First and last voxel of what is to be shown; cut off at the volume's border.

    Raises
    ------
    ValueError
        If the plane has another name.

    Examples
    --------
    >>> found = slice_through(
    ...     (10, 8, 6), plane="coronal", voxel_mm=(2.0, 2.0, 3.0), middle=(4, 3.2, 2), low=(1, 0, 0), high=(4, 7, 99)
    ... )
    >>> found.label, found.index.shape, found.index[0, 0].tolist()
    ('Coronal slice 4 of 8', (6, 4, 3), [1, 3, 5])
    """
    if plane not in ("axial", "coronal"):
        raise ValueError(f"a slice is axial or coronal, not {plane!r}")
    across, up, through = (0, 1, 2) if plane == "axial" else (0, 2, 1)
    at = min(max(round(float(middle[through])), 0), shape[through] - 1)
    axes, pixels = [], []
    for axis in (across, up):
        first = min(max(int(np.floor(low[axis])), 0), shape[axis] - 1)
        last = min(max(int(np.ceil(high[axis])), first), shape[axis] - 1)
        step = ceil((last - first + 1) / LARGEST_SIDE)
        axes.append(np.arange(first, last + 1, step))
        pixels.append(step * voxel_mm[axis])
    index = np.empty((axes[1].size, axes[0].size, 3), dtype=np.intp)
    index[..., across] = axes[0]
    index[..., up] = axes[1][::-1, None]
    index[..., through] = at
    return Plane(plane, f"{plane.capitalize()} slice {at + 1} of {shape[through]}", index, (pixels[0], pixels[1]))


def slice_record(
    volume: NDArray[np.float64], *, plane: Plane, fitted: NDArray[np.float64], unit: str = "image unit"
) -> dict[str, Any]:
    """A slice as records keep it: measured, fitted and difference (measured minus fitted) as 8-bit greys.

    Parameters
    ----------
    volume
        The image, shape (x, y, z), any unit.
    plane
        Which slice.
    fitted
        The fit at the plane's voxels, shape (height * width,); not finite where nothing was fitted.
    unit
        The image's unit in words.

    Returns
    -------
    dict
        `measured` and `fitted` share one scale: grey 0 is `low`, 255 is `high`. In `difference` grey 128 is none, 1 is
        −`difference_span`, 255 is +`difference_span`: the smallest of 5, 10, 20, 50, 100 % of the range from low to
        high that 99 % of the differences keep to. Pixels without a value are 0, and 128 in `difference`. The greys
        are base64 text of unsigned bytes, row by row from the top left.

    Examples
    --------
    >>> ramp = np.repeat(np.arange(4.0)[:, None, None], 4, axis=1)
    >>> shown = slice_through((4, 4, 1), plane="axial", voxel_mm=(1, 1, 1), middle=(0, 0, 0), low=(0, 0), high=(3, 3))
    >>> record = slice_record(ramp, plane=shown, fitted=ramp[..., 0].T[::-1].ravel() - 0.15)
    >>> list(base64.b64decode(record["measured"])[:4]), record["low"], record["high"], record["difference_span"]
    ([12, 93, 174, 255], -0.15, 3.0, 0.1575)
    >>> list(base64.b64decode(record["difference"])[:2])
    [249, 249]
    """
    height, width, _ = plane.index.shape
    measured = np.asarray(volume[tuple(plane.voxels.T)], dtype=np.float64)
    fitted = np.asarray(fitted, dtype=np.float64)
    difference = measured - fitted
    shown = np.concatenate([_middle_part(measured), fitted[np.isfinite(fitted)]])
    low, high = (float(shown.min()), float(shown.max())) if shown.size else (0.0, 0.0)
    if not high > low:
        high = low + 1.0
    known = np.abs(difference[np.isfinite(difference)])
    most = float(np.percentile(known, 99.0)) / (high - low) if known.size else 0.0
    span = next((step for step in DIFFERENCE_STEPS if most <= step), DIFFERENCE_STEPS[-1]) * (high - low)
    levels = (difference / span * _HALF) + _MIDDLE
    return {
        "plane": plane.plane,
        "label": plane.label,
        "unit": unit,
        "width": width,
        "height": height,
        "width_mm": round(width * plane.pixel_mm[0], 3),
        "height_mm": round(height * plane.pixel_mm[1], 3),
        "low": float(f"{low:.6g}"),
        "high": float(f"{high:.6g}"),
        "measured": _greys(255.0 * (measured - low) / (high - low), nothing=0),
        "fitted": _greys(255.0 * (fitted - low) / (high - low), nothing=0),
        "difference": _greys(np.clip(levels, _MIDDLE - _HALF, _MIDDLE + _HALF), nothing=_MIDDLE),
        "difference_span": float(f"{span:.6g}"),
    }


def _middle_part(values: NDArray[np.float64]) -> NDArray[np.float64]:
    """The values without the lowest and highest half per cent, so that a stray voxel does not set the scale."""
    finite = values[np.isfinite(values)]
    if not finite.size:
        return finite
    low, high = np.percentile(finite, [0.5, 99.5])
    return np.clip(finite, low, high)


def _greys(levels: NDArray[np.float64], *, nothing: int) -> str:
    known = np.where(np.isfinite(levels), levels, nothing)
    return base64.b64encode(np.rint(np.clip(known, 0.0, 255.0)).astype(np.uint8).tobytes()).decode("ascii")
