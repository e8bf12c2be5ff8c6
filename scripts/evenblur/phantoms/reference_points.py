"""Which voxels of a measured image enter the fit of a reference, and how they fall into blocks for the jackknife."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from evenblur.phantoms.reference_fit import State
from evenblur.phantoms.reference_model import ReferenceModel
from evenblur.phantoms.rigid import Motion, voxel_centres


@dataclass(frozen=True)
class Points:
    """Voxels in the fit: array `index` (n, 3), positions `mm` (n, 3), `values` (n,), and the volume each stands for."""

    index: NDArray[np.intp]
    mm: NDArray[np.float64]
    values: NDArray[np.float64]
    point_mm3: float
    missing: int


def chosen_points(
    volume: NDArray[np.float64],
    *,
    voxel_mm: tuple[float, float, float],
    model: ReferenceModel,
    motion: Motion,
    margin_mm: float,
    most: int,
) -> Points:
    """Voxels within a margin of the moved object, thinned on an oblique lattice to at most `most`.

    Noise reaches over several voxels, so that every second, fourth or eighth voxel says nearly as much as all.
    `missing` counts the voxels near the object that have no value; they are left out.
    """
    corners = np.stack(np.meshgrid(*[(0.0, extent) for extent in model.extent_mm], indexing="ij"), axis=-1)
    hull = motion.apply(corners.reshape(-1, 3) + model.low_mm)
    centres = voxel_centres(volume.shape, voxel_mm)
    kept = [
        np.flatnonzero((at >= low) & (at <= high))
        for at, low, high in zip(centres, hull.min(axis=0) - margin_mm, hull.max(axis=0) + margin_mm, strict=True)
    ]
    index = np.stack(np.meshgrid(*kept, indexing="ij"), axis=-1).reshape(-1, 3)
    thinning = 1
    while True:
        some = index[(index @ np.array([1, 3, 5])) % thinning == 0] if thinning > 1 else index
        mm = np.stack([centres[axis][some[:, axis]] for axis in range(3)], axis=1)
        near = model.within(mm, motion=motion, margin_mm=margin_mm)
        if int(near.sum()) <= most:
            break
        thinning *= 2
    some, mm = some[near], mm[near]
    values = volume[tuple(some.T)]
    finite = np.isfinite(values)
    return Points(
        some[finite],
        mm[finite],
        values[finite],
        float(np.prod(voxel_mm)) * thinning,
        int(np.sum(~finite)) * thinning,
    )


def noise_width_mm(
    volume: NDArray[np.float64],
    points: Points,
    *,
    voxel_mm: tuple[float, float, float],
    model: ReferenceModel,
    state: State,
) -> float:
    """Width (FWHM, mm) of the filter that would give white noise the residuals' correlation between neighbours.

    dx sqrt(−2 ln 2 / ln rho) for the correlation rho of voxels dx apart (Flitney and Jenkinson, FMRIB report TR00DF1,
    eq. 21), the geometric mean over the axes; at least the geometric mean of the voxel sizes.
    """
    inner = np.all(points.index < np.array(volume.shape) - 1, axis=1)
    seeds = points.index[inner][:: max(1, int(inner.sum()) // 4000)]
    if seeds.shape[0] < 10:
        return float(np.prod(voxel_mm) ** (1.0 / 3.0))
    centres = voxel_centres(volume.shape, voxel_mm)
    groups = [seeds] + [seeds + np.eye(3, dtype=int)[axis] for axis in range(3)]
    every = np.concatenate(groups)
    mm = np.stack([centres[axis][every[:, axis]] for axis in range(3)], axis=1)
    value = model.sample(
        mm, motion=state.motion, in_plane_mm=state.in_plane_mm, axial_mm=state.axial_mm, rough=True
    ).value
    residual = (volume[tuple(every.T)] - state.scale * value - state.offset).reshape(4, -1)
    residual = residual[:, np.all(np.isfinite(residual), axis=0)]
    widths = []
    for axis in range(3):
        together = float(residual[0] @ residual[axis + 1])
        apart = float(np.sqrt((residual[0] @ residual[0]) * (residual[axis + 1] @ residual[axis + 1])))
        rho = float(np.clip(together / apart, 0.25, 0.9999)) if apart > 0.0 else 0.25
        widths.append(voxel_mm[axis] * np.sqrt(-2.0 * np.log(2.0) / np.log(rho)))
    return float(np.prod(widths) ** (1.0 / 3.0))


def block_labels(points_mm: NDArray[np.float64], *, count: int) -> NDArray[np.int64]:
    """Cut points into `count` (a power of two) blocks of equal size, each cut across the longest side.

    Blocks whose labels differ by one in the last place are neighbours, so that even and odd labels interleave.

    Examples
    --------
    >>> block_labels(np.array([[0.0, 0, 0], [9, 0, 0], [1, 0, 0], [8, 0, 0]]), count=2).tolist()
    [0, 1, 0, 1]
    """
    labels = np.zeros(points_mm.shape[0], dtype=np.int64)
    groups = [np.arange(points_mm.shape[0])]
    while len(groups) < count:
        halves = []
        for group in groups:
            part = points_mm[group]
            axis = int(np.argmax(np.ptp(part, axis=0)))
            order = np.argsort(part[:, axis], kind="stable")
            middle = len(group) // 2
            halves += [group[order[:middle]], group[order[middle:]]]
        groups = halves
    for label, group in enumerate(groups):
        labels[group] = label
    return labels


def block_count(region_mm3: float, *, noise_mm: float) -> int:
    """Number of blocks, a power of two from 8 to 64, so that each is at least three noise widths across.

    Noise with a filter of width w is correlated over about 1.5 w; 8 blocks are too few for a standard error.

    Examples
    --------
    >>> block_count(1e6, noise_mm=5.0), block_count(1e6, noise_mm=20.0)
    (64, 8)
    """
    most = region_mm3 / (3.0 * noise_mm) ** 3
    return int(2 ** int(np.clip(np.floor(np.log2(max(most, 1.0))), 3, 6)))


def share_outside(model: ReferenceModel, motion: Motion, *, extent_mm: NDArray[np.float64]) -> float:
    """Share of the reference's activity that lies outside an image of this extent (mm, three sides)."""
    stride = [max(1, n // 40) for n in model.values.shape]
    # Block sums keep all of the activity while thinning the positions.
    sums = model.values
    for axis in range(3):
        sums = np.add.reduceat(sums, np.arange(0, sums.shape[axis], stride[axis]), axis=axis)
    where = np.argwhere(sums > 0.0)
    low = where * np.array(stride)
    high = np.minimum(low + np.array(stride), np.array(model.values.shape))
    at = motion.apply(model.low_mm + 0.5 * (low + high) * model.voxel_mm)
    weight = sums[tuple(where.T)]
    outside = np.any(np.abs(at) > extent_mm / 2.0, axis=1)
    return float(weight[outside].sum() / weight.sum())
