"""Blocks of voxels for the jackknife: how wide the noise's correlation is, and how a cylinder is cut by it."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from evenblur.phantoms.cylinder_fit import FIRST_END, REACH, SECOND_END, WALL, CylinderFit
from evenblur.statistics import MINIMUM_BLOCKS, shortfall

_LONGEST_LAG = 15
_WIDTHS = (6.0, 5.0, 4.0, 3.0, 2.0)
"""How many correlation widths a block should be wide: the most that still gives enough blocks."""


def correlation_width(
    residuals: NDArray[np.float64],
    *,
    index: NDArray[np.intp],
    shape: tuple[int, int, int],
    voxel_mm: tuple[float, float, float],
) -> tuple[float, float]:
    """Full width at half maximum (mm) of the residuals' autocorrelation, in-plane and axial.

    Parameters
    ----------
    residuals
        Residuals of some voxels, shape (n,).
    index
        Their places in the flattened image, shape (n,).
    shape, voxel_mm
        Shape of the image and voxel sizes, mm.

    Returns
    -------
    in_plane_mm, axial_mm
        At least one voxel each: white noise has the width of its voxel.

    Examples
    --------
    >>> noise = np.random.default_rng(0).normal(size=8000)
    >>> widths = correlation_width(noise, index=np.arange(8000), shape=(20, 20, 20), voxel_mm=(2.0, 2.0, 3.0))
    >>> [round(w) for w in widths]
    [2, 3]
    """
    volume = np.zeros(shape)
    known = np.zeros(shape)
    volume.ravel()[index] = residuals - residuals.mean()
    known.ravel()[index] = 1.0
    box = tuple(slice(int(w.min()), int(w.max()) + 1) for w in np.unravel_index(index, shape))
    volume, known = volume[box], known[box]
    variance = float(np.mean((residuals - residuals.mean()) ** 2))
    widths = []
    for axis, step in enumerate(voxel_mm):
        # A dozen planes tell the correlation; reading all of a large image would only take time.
        across = 2 if axis < 2 else 0
        planes = np.unique(np.linspace(0, volume.shape[across] - 1, 12).astype(int))
        v = np.moveaxis(np.take(volume, planes, axis=across), axis, 0)
        k = np.moveaxis(np.take(known, planes, axis=across), axis, 0)
        previous, width = 1.0, 2.0 * _LONGEST_LAG * step
        for lag in range(1, min(_LONGEST_LAG, v.shape[0])):
            pairs = float(np.sum(k[:-lag] * k[lag:]))
            if pairs < 20 or variance <= 0.0:
                width = 2.0 * lag * step
                break
            correlation = float(np.sum(v[:-lag] * v[lag:])) / pairs / variance
            if correlation < 0.5:
                width = 2.0 * step * (lag - 1 + (previous - 0.5) / (previous - correlation))
                break
            previous = correlation
        widths.append(max(width, step) if v.shape[0] > 1 else step)
    return max(widths[0], widths[1]), widths[2]


def cylinder_correlation(
    fit: CylinderFit, *, shape: tuple[int, int, int], voxel_mm: tuple[float, float, float]
) -> tuple[float, float]:
    """Correlation widths (mm) of the noise at the wall; what the model misses alike all round is taken out first."""
    wall = fit.sample.group == WALL
    residuals = fit.fitted.residuals[: wall.size][wall]
    bins = np.round((fit.placed.rho[wall] - fit.value("radius")) / (0.25 * fit.value("sigma"))).astype(int)
    bins -= bins.min()
    residuals = residuals - (np.bincount(bins, residuals) / np.maximum(np.bincount(bins), 1))[bins]
    contrast = abs(fit.value("inside") - fit.value("outside"))
    if residuals.std() < 1e-3 * contrast:
        return max(voxel_mm[:2]), voxel_mm[2]  # no noise: what is left is the model's last digits
    return correlation_width(residuals, index=fit.sample.index[wall], shape=shape, voxel_mm=voxel_mm)


@dataclass(frozen=True)
class CylinderBlocks:
    """Labels (n,) of the voxels' blocks, −1 for none; numbers of blocks; and by what the jackknife falls short.

    `wall_excess` and `end_excess` are the factors (1 or a little more) on a standard error for what neighbouring blocks
    have in common.
    """

    labels: NDArray[np.int64]
    wall: int
    ends: int
    wall_excess: float
    end_excess: float


def cylinder_blocks(fit: CylinderFit, *, correlation_mm: tuple[float, float]) -> CylinderBlocks:
    """Labels of the voxels' blocks: sectors × slabs of the wall, wedges × rings of the ends.

    Parameters
    ----------
    fit
        A cylinder's fit.
    correlation_mm
        Widths (FWHM) of the noise's autocorrelation, in-plane and axial.

    Returns
    -------
    CylinderBlocks
        With no labels where too few blocks (under 12) would fit.
    """
    sample, placed = fit.sample, fit.placed
    labels = np.full(sample.group.size, -1, dtype=np.int64)
    angle = np.arctan2(placed.normal[1], placed.normal[0]) / (2.0 * np.pi) + 0.5
    wall = sample.group == WALL
    along = placed.along[wall]
    height = float(np.ptp(along)) if along.size else 0.0
    sectors = slabs = 0
    for width in _WIDTHS:
        sectors = int(min(2.0 * np.pi * fit.value("radius") / (width * correlation_mm[0]), 24)) // 2 * 2
        slabs = int(np.clip(height / (width * correlation_mm[1]), 1, 8))
        if sectors * slabs >= MINIMUM_BLOCKS and sectors >= 6:
            break
    wall_blocks, wall_excess = 0, 1.0
    if sectors >= 6 and sectors * slabs >= MINIMUM_BLOCKS:
        sector = np.minimum((angle[wall] * sectors).astype(int), sectors - 1)
        slab = np.minimum(((along - along.min()) / max(height, 1e-9) * slabs).astype(int), slabs - 1)
        # Neighbours in either direction differ in parity, so the two halves are a checkerboard.
        labels[wall] = slab * sectors + np.where(slab % 2 == 0, sector, sector ^ 1)
        wall_blocks = int(np.unique(labels[wall]).size)
        kept = shortfall(correlation_mm[0], block_mm=2.0 * np.pi * fit.value("radius") / sectors)
        if slabs > 1:
            kept *= shortfall(correlation_mm[1], block_mm=height / slabs)
        wall_excess = float(1.0 / np.sqrt(kept))
    end_blocks, end_excess = _label_ends(fit, labels, angle, correlation_mm[0], first=sectors * slabs)
    return CylinderBlocks(labels, wall_blocks, end_blocks, wall_excess, end_excess)


def _label_ends(
    fit: CylinderFit, labels: NDArray[np.int64], angle: NDArray[np.float64], correlation: float, *, first: int
) -> tuple[int, float]:
    seen = [group for group, used in zip((FIRST_END, SECOND_END), fit.sample.ends, strict=True) if used]
    if not seen:
        return 0, 1.0
    rho = fit.placed.rho
    reach = max(fit.value("radius") - REACH * fit.value("sigma"), 0.6 * fit.value("radius"))
    area = np.pi * reach**2
    for wedges, rings, width in ((8, 3, 5.0), (6, 2, 3.0), (6, 2, 2.0), (6, 1, 2.0)):
        if area / (wedges * rings) >= (width * correlation) ** 2 and wedges * rings * len(seen) >= MINIMUM_BLOCKS:
            break
    else:
        return 0, 1.0
    kept = shortfall(correlation, block_mm=float(np.sqrt(area / (wedges * rings)))) ** 2
    used = 0
    for place, group in enumerate(seen):
        mine = fit.sample.group == group
        wedge = np.minimum((angle[mine] * wedges).astype(int), wedges - 1)
        ring = np.minimum(((rho[mine] / reach) ** 2 * rings).astype(int), rings - 1)
        labels[mine] = first + (place * rings + ring) * wedges + np.where(ring % 2 == 0, wedge, wedge ^ 1)
        used += int(np.unique(labels[mine]).size)
    return used, float(1.0 / np.sqrt(kept))
