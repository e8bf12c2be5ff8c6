"""Recovery coefficients of hot spheres: what share of a sphere's activity its image still shows.

Three readings, each divided by a true level that the caller states (for instance the hot level of a fit):

maximum
    the highest voxel within the sphere's radius of its centre, and at least within the voxel that holds the centre;
half_contour_mean
    the mean of the voxels at or above (maximum + background) / 2 that hang together, face to face, with that highest
    voxel (the isocontour at half between background and maximum);
peak
    the mean within a ball of 1 mL, placed where that mean is highest. Each voxel counts with the share of it that lies
    in the ball (the image taken as constant over each voxel; shares from 8 x 8 x 8 points a voxel), and the ball's
    centre is placed to an eighth of a voxel.
"""

from dataclasses import dataclass
from math import pi

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

Array = NDArray[np.float64]

PEAK_VOLUME_MM3 = 1000.0
PEAK_RADIUS_MM = (PEAK_VOLUME_MM3 * 3.0 / (4.0 * pi)) ** (1.0 / 3.0)
"""Radius of a ball of 1 mL (6.2035 mm)."""

DEFINITIONS = {
    "maximum": "highest voxel within the sphere's radius of its centre",
    "half_contour_mean": "mean of the connected voxels at or above (maximum + background) / 2",
    "peak": "highest mean within a ball of 1 mL; a voxel on its surface counts by the share of it inside",
}
"""What each reading is, in words for records and reports."""

_POINTS = 8


@dataclass(frozen=True)
class Recovery:
    """Recovery coefficients of one sphere; `peak` is None where the 1 mL ball does not fit into the image."""

    maximum: float
    half_contour_mean: float
    peak: float | None


def sphere_maximum(
    volume: Array, *, voxel_mm: tuple[float, float, float], centre_mm: tuple[float, float, float], radius_mm: float
) -> tuple[float, tuple[int, int, int]]:
    """The highest voxel within `radius_mm` of a centre, and its index.

    Parameters
    ----------
    volume
        Image, shape (x, y, z), any unit.
    voxel_mm, centre_mm
        Voxel size, and the centre counted from the centre of the first voxel, mm.
    radius_mm
        Radius searched, mm; the voxel nearest to the centre is always searched.

    Returns
    -------
    value, index
        In the image's unit; the index of the voxel.

    Raises
    ------
    ValueError
        If the centre lies outside the volume.

    >>> image = np.zeros((5, 5, 5)); image[2, 3, 2] = 7.0
    >>> sphere_maximum(image, voxel_mm=(2.0, 2.0, 2.0), centre_mm=(4.0, 4.0, 4.0), radius_mm=2.5)
    (7.0, (2, 3, 2))
    """
    box, squared = _box(volume.shape, voxel_mm=voxel_mm, centre_mm=centre_mm, reach_mm=radius_mm)
    part = np.where(squared <= max(radius_mm**2, float(squared.min())), volume[box], -np.inf)
    at = np.unravel_index(int(np.argmax(part)), part.shape)
    x, y, z = (int(k) + s.start for k, s in zip(at, box, strict=True))
    return float(part[at]), (x, y, z)


def half_contour_mean(
    volume: Array,
    *,
    voxel_mm: tuple[float, float, float],
    peak_index: tuple[int, int, int],
    background: float,
    reach_mm: float,
) -> float:
    """Mean of the connected voxels at or above half between background and the value at `peak_index`.

    Parameters
    ----------
    volume
        Image, shape (x, y, z), any unit.
    voxel_mm
        Voxel size, mm.
    peak_index
        Index of the sphere's highest voxel.
    background
        Level around the sphere, in the image's unit.
    reach_mm
        Voxels farther than this from the highest voxel are left alone (a neighbour is not run into).

    >>> image = np.zeros((5, 5, 5)); image[2, 2, 1:4] = [3.0, 4.0, 1.0]
    >>> half_contour_mean(image, voxel_mm=(1.0, 1.0, 1.0), peak_index=(2, 2, 2), background=0.0, reach_mm=9.0)
    3.5
    """
    x, y, z = (k * step for k, step in zip(peak_index, voxel_mm, strict=True))
    box, squared = _box(volume.shape, voxel_mm=voxel_mm, centre_mm=(x, y, z), reach_mm=reach_mm)
    part = volume[box]
    threshold = (float(volume[peak_index]) + background) / 2.0
    regions, _ = ndimage.label((part >= threshold) & (squared <= reach_mm**2))
    mine = regions == regions[tuple(k - s.start for k, s in zip(peak_index, box, strict=True))]
    return float(np.mean(part[mine]))


def peak_mean(
    volume: Array, *, voxel_mm: tuple[float, float, float], centre_mm: tuple[float, float, float], search_mm: float
) -> float | None:
    """Highest mean within a ball of 1 mL whose centre lies within `search_mm` of a centre.

    Parameters
    ----------
    volume
        Image, shape (x, y, z), any unit; taken as constant over each voxel.
    voxel_mm, centre_mm
        Voxel size, and the centre counted from the centre of the first voxel, mm.
    search_mm
        How far from there the ball may be placed, mm.

    Returns
    -------
    The mean in the image's unit, or None where no such ball lies wholly in the image.

    Notes
    -----
    The ball is tried at every voxel centre in reach, then moved by halves, quarters and eighths of a voxel.

    >>> flat = np.full((12, 12, 12), 5.0)
    >>> round(peak_mean(flat, voxel_mm=(2.0, 2.0, 2.0), centre_mm=(11.0, 11.0, 11.0), search_mm=2.0), 9)
    5.0
    """
    step = np.array(voxel_mm)
    last = (np.array(volume.shape) - 0.5) * step
    shares = _ball_shares(voxel_mm=voxel_mm, fraction=(0.0, 0.0, 0.0))
    reach = np.array(shares.shape) // 2
    low = np.maximum(np.ceil((np.array(centre_mm) - search_mm) / step).astype(int), reach)
    high = np.minimum(
        np.floor((np.array(centre_mm) + search_mm) / step).astype(int), np.array(volume.shape) - 1 - reach
    )
    if np.any(high < low):
        return None
    area = volume[tuple(slice(a - r, b + r + 1) for a, b, r in zip(low, high, reach, strict=True))]
    inner = tuple(slice(r, n - r) for r, n in zip(reach, area.shape, strict=True))
    means = ndimage.correlate(area, shares, mode="nearest")[inner]
    best = np.array(np.unravel_index(int(np.argmax(means)), means.shape)) + low.astype(float)
    highest = float(means.max())
    for part in (0.5, 0.25, 0.125):
        around = best.copy()
        for move in np.ndindex(3, 3, 3):
            trial = around + (np.array(move) - 1) * part
            place = trial * step
            inside = np.all(place - PEAK_RADIUS_MM >= -0.5 * step) and np.all(place + PEAK_RADIUS_MM <= last)
            if inside and np.linalg.norm(place - np.array(centre_mm)) <= search_mm:
                mean = _mean_in_ball(volume, voxel_mm=voxel_mm, place=trial)
                if mean > highest:
                    highest, best = mean, trial
    return highest


def recovery(
    volume: Array,
    *,
    voxel_mm: tuple[float, float, float],
    centre_mm: tuple[float, float, float],
    diameter_mm: float,
    background: float,
    true_level: float,
) -> Recovery:
    """The three recovery coefficients of one sphere (definitions: module docstring).

    Parameters
    ----------
    volume
        Image, shape (x, y, z), any unit.
    voxel_mm, centre_mm
        Voxel size, and the sphere's centre counted from the centre of the first voxel, mm.
    diameter_mm
        The sphere's inner diameter, mm.
    background
        Level around the sphere, in the image's unit: it sets the contour and is not subtracted.
    true_level
        What a perfect image would show inside the sphere, in the image's unit.

    Raises
    ------
    ValueError
        If the true level or the diameter is not positive, or the centre lies outside the volume.

    >>> flat = np.full((20, 20, 20), 2.0)
    >>> found = recovery(flat, voxel_mm=(2.0, 2.0, 2.0), centre_mm=(20.0, 20.0, 20.0), diameter_mm=17.0,
    ...                  background=0.0, true_level=4.0)
    >>> found.maximum, found.half_contour_mean, round(found.peak, 9)
    (0.5, 0.5, 0.5)
    """
    if not true_level > 0 or not diameter_mm > 0:
        raise ValueError(f"true level and diameter must be positive: {true_level}, {diameter_mm} mm")
    radius = diameter_mm / 2.0
    maximum, index = sphere_maximum(volume, voxel_mm=voxel_mm, centre_mm=centre_mm, radius_mm=radius)
    mean = half_contour_mean(
        volume,
        voxel_mm=voxel_mm,
        peak_index=index,
        background=background,
        reach_mm=diameter_mm + 2.0 * max(voxel_mm),
    )
    peak = peak_mean(volume, voxel_mm=voxel_mm, centre_mm=centre_mm, search_mm=radius)
    return Recovery(maximum / true_level, mean / true_level, None if peak is None else peak / true_level)


def _box(
    shape: tuple[int, ...],
    *,
    voxel_mm: tuple[float, float, float],
    centre_mm: tuple[float, float, float],
    reach_mm: float,
) -> tuple[tuple[slice, slice, slice], Array]:
    """The voxels within reach of a centre along each axis, and their squared distances from it."""
    slices, axes = [], []
    for count, step, centre in zip(shape, voxel_mm, centre_mm, strict=True):
        if not -0.5 * step <= centre <= (count - 0.5) * step:
            raise ValueError(f"the centre {centre_mm} mm lies outside the volume")
        near = min(max(round(centre / step), 0), count - 1)
        low = max(min(int(np.ceil((centre - reach_mm) / step)), near), 0)
        high = min(max(int((centre + reach_mm) // step), near), count - 1)
        slices.append(slice(low, high + 1))
        axes.append(np.arange(low, high + 1) * step - centre)
    x, y, z = axes
    return (slices[0], slices[1], slices[2]), x[:, None, None] ** 2 + y[:, None] ** 2 + z**2


def _ball_shares(*, voxel_mm: tuple[float, float, float], fraction: tuple[float, float, float]) -> Array:
    """Shares of the 1 mL ball in voxels about it, summing to 1; its centre is `fraction` voxels off the middle one."""
    points = (np.arange(_POINTS) + 0.5) / _POINTS - 0.5
    axes = []
    for step, off in zip(voxel_mm, fraction, strict=True):
        half = int(np.ceil(PEAK_RADIUS_MM / step + abs(off) - 0.5))
        axes.append((((np.arange(-half, half + 1) - off)[:, None] + points).ravel() * step) ** 2)
    inside = axes[0][:, None, None] + axes[1][:, None] + axes[2] <= PEAK_RADIUS_MM**2
    nx, ny, nz = (axis.size // _POINTS for axis in axes)
    shares = inside.reshape(nx, _POINTS, ny, _POINTS, nz, _POINTS).sum(axis=(1, 3, 5)).astype(np.float64)
    return shares / shares.sum()


def _mean_in_ball(volume: Array, *, voxel_mm: tuple[float, float, float], place: Array) -> float:
    """Mean in the 1 mL ball centred at `place` (voxels); the ball must lie in the volume."""
    middle = np.round(place).astype(int)
    x, y, z = place - middle
    shares = _ball_shares(voxel_mm=voxel_mm, fraction=(x, y, z))
    slices, kept = [], []
    for centre, size, count in zip(middle, shares.shape, volume.shape, strict=True):
        low, high = centre - size // 2, centre + size // 2 + 1
        begin, end = max(low, 0), min(high, count)
        slices.append(slice(begin, end))
        kept.append(slice(begin - low, size - (high - end)))
    return float(np.sum(volume[tuple(slices)] * shares[tuple(kept)]))
