"""Find a filled cylinder in an image without being told where: first values for the fit, and what else is there."""

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage
from scipy.optimize import least_squares

from evenblur.phantoms.base import MeasurementError

MAXIMUM_TILT = np.tan(np.radians(30.0))


@dataclass(frozen=True)
class Placed:
    """Cylinder coordinates of voxels: distance from the axis, position along it, and unit vectors across it."""

    rho: NDArray[np.float64]
    along: NDArray[np.float64]
    normal: NDArray[np.float64]  # (3, ...): from the axis outwards
    axis: NDArray[np.float64]  # (3,)


@dataclass(frozen=True)
class Start:
    """First values: mm, the first voxel's centre at 0. `ends_mm` along the axis from `middle_mm`, None if unseen."""

    centre_mm: tuple[float, float]
    slope: tuple[float, float]
    middle_mm: float
    radius_mm: float
    inside: float
    outside: float
    sigma_mm: float
    ends_mm: tuple[float | None, float | None]
    cut: bool
    other_share: float
    others: NDArray[np.bool_] | None


def place(
    points: tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]],
    *,
    centre_mm: tuple[float, float],
    slope: tuple[float, float],
    middle_mm: float,
) -> Placed:
    """Cylinder coordinates (mm) of points (x, y, z, mm) for an axis through (centre, middle) along (slope, 1)."""
    axis = np.array([slope[0], slope[1], 1.0]) / np.sqrt(1.0 + slope[0] ** 2 + slope[1] ** 2)
    v = [p - q for p, q in zip(points, (*centre_mm, middle_mm), strict=True)]
    along = v[0] * axis[0] + v[1] * axis[1] + v[2] * axis[2]
    across = np.stack([v[k] - along * axis[k] for k in range(3)])
    rho = np.sqrt(np.sum(across**2, axis=0))
    return Placed(rho, along, across / np.maximum(rho, 1e-9), axis)


def find_cylinder(volume: NDArray[np.float64], *, voxel_mm: tuple[float, float, float]) -> Start:
    """Find the one bright cylinder that runs roughly along z.

    Parameters
    ----------
    volume
        Image, shape (x, y, z).
    voxel_mm
        Voxel sizes, mm.

    Returns
    -------
    Start

    Raises
    ------
    MeasurementError
        If no cylinder brighter than its surroundings is seen, or two objects are.
    """
    mask, others, inside, outside = _segment(volume)
    share = float(np.count_nonzero(others) / np.count_nonzero(mask)) if others is not None else 0.0
    if share > 0.2:
        raise MeasurementError(f"the image shows more than one object (the next has {100 * share:.0f} % of the size)")
    lateral = _lateral_border_share(mask)
    if lateral > 0.6:
        raise MeasurementError(
            "the bright part surrounds a darker one: a hot cylinder in colder surroundings is needed"
        )
    centre, slope, radius, middle = _axis(mask, voxel_mm)
    if radius < 2.0 * max(voxel_mm[:2]):
        raise MeasurementError(f"the bright object is only {2 * radius:.1f} mm across: too small for a cylinder")
    if np.hypot(*slope) > MAXIMUM_TILT:
        raise MeasurementError("the cylinder is tilted by more than 30 degrees to the axial direction")
    placed = place(grid_points(volume.shape, voxel_mm), centre_mm=centre, slope=slope, middle_mm=middle)
    relative = (volume - outside) / (inside - outside)
    ends, length_axis = _ends(relative, placed, radius, max(voxel_mm))
    _check_shape(mask, placed, radius, ends, max(voxel_mm))
    sigma = _edge_sigma(relative, placed, radius, ends, length_axis, min(voxel_mm[:2]))
    return Start(
        centre,
        slope,
        middle,
        radius,
        inside,
        outside,
        sigma,
        ends,
        bool(lateral > 0.0),
        share,
        None if others is None else ndimage.binary_dilation(others, iterations=4),
    )


def grid_points(
    shape: tuple[int, ...], voxel_mm: tuple[float, float, float]
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Voxel centres (mm), as three arrays that broadcast to the image's shape."""
    x, y, z = (np.arange(n, dtype=np.float64) * step for n, step in zip(shape, voxel_mm, strict=True))
    return np.asarray(x[:, None, None]), np.asarray(y[None, :, None]), np.asarray(z[None, None, :])


def _segment(
    volume: NDArray[np.float64],
) -> tuple[NDArray[np.bool_], NDArray[np.bool_] | None, float, float]:
    """The largest part above half contrast, everything else of some size, and the levels inside and outside."""
    smooth = ndimage.uniform_filter(volume, [min(3, n) for n in volume.shape], mode="nearest")
    level = _otsu(smooth)
    for _ in range(3):
        mask, sizes, labels = _largest(smooth > level)
        element = ndimage.generate_binary_structure(3, 1)
        for axis, count in enumerate(volume.shape):
            if count <= 6:  # a thin image would be eroded away along its short axis
                np.moveaxis(element, axis, 0)[[0, 2]] = False
        core = ndimage.binary_erosion(mask, element, iterations=3, border_value=1)
        shell = ~ndimage.binary_dilation(mask, element, iterations=3)
        if np.count_nonzero(core) < 8:
            core = mask
        if np.count_nonzero(shell) < 8:
            shell = ~mask
        inside, outside = float(np.median(volume[core])), float(np.median(volume[shell]))
        new = 0.5 * (inside + outside)
        if abs(new - level) < 0.02 * abs(inside - outside):
            break
        level = new
    if inside <= outside:
        raise MeasurementError("no object brighter than its surroundings is seen")
    noise = 1.4826 * float(np.median(np.abs(volume[shell] - outside)))
    spread = 1.4826 * float(np.median(np.abs(volume[core] - inside)))
    if inside - outside < 1.5 * max(noise, spread):
        raise MeasurementError("the object does not stand out of the noise")
    big = [k for k in range(1, len(sizes)) if sizes[k] > max(8, 0.001 * sizes.max()) and sizes[k] < sizes.max()]
    others = np.isin(labels, big) if big else None
    return mask, others, inside, outside


def _otsu(volume: NDArray[np.float64]) -> float:
    """Level that splits the histogram with the largest variance between both sides (Otsu 1979)."""
    low, high = float(volume.min()), float(volume.max())
    if not high > low:
        raise MeasurementError("the image is the same everywhere")
    counts, edges = np.histogram(volume, bins=256, range=(low, high))
    middle = 0.5 * (edges[1:] + edges[:-1])
    below = np.cumsum(counts)
    above = below[-1] - below
    total = np.cumsum(counts * middle)
    with np.errstate(invalid="ignore", divide="ignore"):
        contrast = below * above * (total / below - (total[-1] - total) / above) ** 2
    return float(edges[1:][int(np.nanargmax(contrast))])


def _largest(mask: NDArray[np.bool_]) -> tuple[NDArray[np.bool_], NDArray[Any], NDArray[Any]]:
    labels, count = ndimage.label(mask)
    if count == 0:
        raise MeasurementError("no object is seen")
    sizes = np.bincount(labels.ravel())
    sizes[0] = 0
    return labels == int(np.argmax(sizes)), sizes, labels


def _lateral_border_share(mask: NDArray[np.bool_]) -> float:
    """How much of the lateral border's voxels the object covers, in the slices that it reaches."""
    slices = mask.any(axis=(0, 1))
    part = mask[:, :, slices]
    border = np.concatenate([part[0].ravel(), part[-1].ravel(), part[:, 0].ravel(), part[:, -1].ravel()])
    return float(border.mean())


def _axis(
    mask: NDArray[np.bool_], voxel_mm: tuple[float, float, float]
) -> tuple[tuple[float, float], tuple[float, float], float, float]:
    """Circle fit to the mask's surface, with a straight axis: centre (mm) at the middle, slope, radius (mm), middle."""
    area = mask.sum(axis=(0, 1)).astype(float)
    slices = np.flatnonzero(area > 0.5 * area.max())
    middle = float(slices.mean()) * voxel_mm[2]
    flat = np.zeros((3, 3, 1), dtype=bool)
    flat[1, :, 0] = flat[:, 1, 0] = True
    surface = mask & ~ndimage.binary_erosion(mask, flat, border_value=1)
    x, y, z = np.nonzero(surface)
    keep = np.isin(z, slices)
    x, y, z = x[keep], y[keep], z[keep]
    if x.size < 12:
        raise MeasurementError("the object's surface lies outside the image")
    thin = np.linspace(0, x.size - 1, min(x.size, 6000)).astype(int)
    px, py, pz = x[thin] * voxel_mm[0], y[thin] * voxel_mm[1], z[thin] * voxel_mm[2] - middle
    # Surface voxels are the outermost inside: the surface itself lies half a voxel further out.
    radius = np.sqrt(area.max() * voxel_mm[0] * voxel_mm[1] / np.pi)

    def misses(p: NDArray[np.float64]) -> NDArray[np.float64]:
        axis = np.array([p[2], p[3], 1.0]) / np.sqrt(1.0 + p[2] ** 2 + p[3] ** 2)
        vx, vy = px - p[0], py - p[1]
        along = vx * axis[0] + vy * axis[1] + pz * axis[2]
        rho = np.sqrt((vx - along * axis[0]) ** 2 + (vy - along * axis[1]) ** 2 + (pz - along * axis[2]) ** 2)
        return np.asarray(rho + 0.5 * voxel_mm[0] - p[4])

    free = 5 if slices.size >= 3 else 3
    start = np.array([px.mean(), py.mean(), 0.0, 0.0, radius])

    def reduced(q: NDArray[np.float64]) -> NDArray[np.float64]:
        return misses(q if free == 5 else np.array([q[0], q[1], 0.0, 0.0, q[2]]))

    first = start if free == 5 else start[[0, 1, 4]]
    best = least_squares(reduced, first, loss="soft_l1", f_scale=0.5 * max(voxel_mm[:2]), x_scale="jac").x
    if free == 3:
        best = np.array([best[0], best[1], 0.0, 0.0, best[2]])
    return (float(best[0]), float(best[1])), (float(best[2]), float(best[3])), float(abs(best[4])), middle


def _ends(
    relative: NDArray[np.float64], placed: Placed, radius: float, step: float
) -> tuple[tuple[float | None, float | None], tuple[float, float]]:
    """Where the mean over the inner part falls to one half along the axis, and the range that the field covers."""
    inner = placed.rho < 0.7 * radius
    along, value = placed.along[inner], relative[inner]
    bins = np.round(along / (0.5 * step)).astype(int)
    lowest = int(bins.min())
    counts = np.bincount(bins - lowest)
    means = np.bincount(bins - lowest, weights=value) / np.maximum(counts, 1)
    good = np.flatnonzero(counts > 0.15 * np.percentile(counts[counts > 0], 80))
    position, means = (good + lowest) * 0.5 * step, means[good]
    middle = int(np.argmin(np.abs(position)))
    if means[middle] < 0.5:
        middle = int(np.argmax(means))
    found: list[float | None] = []
    for direction in (-1, 1):
        k = middle
        while 0 <= k + direction < means.size and means[k + direction] > 0.5:
            k += direction
        if not 0 <= k + direction < means.size:
            found.append(None)
            continue
        inside, beyond = means[k], means[k + direction]
        share = (inside - 0.5) / (inside - beyond)
        found.append(float(position[k] + share * (position[k + direction] - position[k])))
    return (found[0], found[1]), (float(position[0]), float(position[-1]))


def _check_shape(
    mask: NDArray[np.bool_], placed: Placed, radius: float, ends: tuple[float | None, float | None], step: float
) -> None:
    """Refuse an object whose surface is not that of a cylinder, by voxels on the wrong side of it."""
    slack = 1.5 * step
    low = -np.inf if ends[0] is None else ends[0]
    high = np.inf if ends[1] is None else ends[1]
    deep = (placed.rho < radius - slack) & (placed.along > low + slack) & (placed.along < high - slack)
    far = (placed.rho > radius + slack) | (placed.along < low - slack) | (placed.along > high + slack)
    wrong = np.count_nonzero(mask & far) + np.count_nonzero(deep & ~mask)
    share = wrong / np.count_nonzero(mask)
    if share > 0.04 or not deep.any():
        raise MeasurementError(
            f"the object is not a cylinder along the bed ({100 * share:.0f} % of it does not fit one)"
        )


def _edge_sigma(
    relative: NDArray[np.float64],
    placed: Placed,
    radius: float,
    ends: tuple[float | None, float | None],
    reach: tuple[float, float],
    step: float,
) -> float:
    """First guess of sigma (mm) from where the mean radial profile falls from 84 % to 16 %."""
    low = reach[0] if ends[0] is None else ends[0]
    high = reach[1] if ends[1] is None else ends[1]
    margin = 0.2 * (high - low)
    chosen = (placed.along >= low + margin) & (placed.along <= high - margin) & (placed.rho > 0.3 * radius)
    chosen &= placed.rho < 2.0 * radius
    bins = np.floor(placed.rho[chosen] / (0.5 * step)).astype(int)
    counts = np.bincount(bins)
    means = np.bincount(bins, weights=relative[chosen]) / np.maximum(counts, 1)
    position = (np.arange(means.size) + 0.5) * 0.5 * step
    position, means = position[counts > 0], means[counts > 0]
    edge = int(np.argmin(np.abs(position - radius)))
    inner, outer = edge, edge
    while inner > 0 and means[inner] < 0.84:
        inner -= 1
    while outer < means.size - 1 and means[outer] > 0.16:
        outer += 1
    return float(np.clip(0.5 * (position[outer] - position[inner]), 0.4 * step, 0.5 * radius))
