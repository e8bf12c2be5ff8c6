"""How sure a point source's width is: blocks within the sources, and copies of the fit in the empty background.

A source is hardly wider than the noise's correlation, so parts of it are no independent witnesses. What the noise does
to the widths is read where there is no source: the fit's own linear response (one Gauss-Newton step) is laid over
empty parts of the image, each a draw of the same noise. The larger of that error and the jackknife's counts.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from evenblur.phantoms.blocks import correlation_width
from evenblur.phantoms.point_fit import COMMON, PointFit
from evenblur.statistics import MINIMUM_BLOCKS, block_jackknife

MOST_PATCHES = 200


@dataclass(frozen=True)
class PointErrors:
    """Standard errors and df of sigma in-plane and axial (mm; shape (2,), None if unknown), and their source."""

    se: NDArray[np.float64] | None
    df: NDArray[np.float64] | None
    source: str | None
    blocks: int
    patches: int
    per_source_se: NDArray[np.float64] | None
    """Shape (sources, 2): each source's share of the error, from the background."""


def source_blocks(fit: PointFit) -> NDArray[np.int64]:
    """Labels: the sources themselves if there are 12 or more; else octants of each source, in two shells if needed."""
    if fit.count >= MINIMUM_BLOCKS:
        return fit.owner.astype(np.int64)
    offset = fit.offsets()
    octant = (offset[0] > 0) * 1 + (offset[1] > 0) * 2 + (offset[2] > 0) * 4
    # Neighbouring octants differ in parity, so that the two halves of the data alternate in space.
    parity = ((octant & 1) + ((octant >> 1) & 1) + ((octant >> 2) & 1)) % 2
    octant = np.where(parity == 0, octant & 6, (octant & 6) + 1)
    shells = 1 if 8 * fit.count >= MINIMUM_BLOCKS else 2
    scale = np.array([fit.fitted.parameters[0]] * 2 + [fit.fitted.parameters[1]])
    distance = np.sqrt(np.sum((offset / scale[:, None]) ** 2, axis=0))
    # The width's information is half within this radius: the median of r^2 d(Gauss)^2 weights.
    shell = np.where(distance > 1.6, shells - 1, 0)
    return (fit.owner * shells + shell) * 8 + octant


def without_own_parameters(
    fit: PointFit, columns: NDArray[np.float64]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Residuals and columns (shape (voxels, k)) with what each source's own parameters explain taken out of both.

    The shared parameters of the reduced problem are those of the whole one (theorem of Frisch, Waugh and Lovell), and
    a whole source can be left out of it: its own parameters have gone before.
    """
    own = fit.fitted.jacobian[:, COMMON:]
    basis, _ = np.linalg.qr(own / np.sqrt(np.sum(own**2, axis=0)))
    residuals = fit.fitted.residuals - basis @ (basis.T @ fit.fitted.residuals)
    return residuals, columns - basis @ (basis.T @ columns)


def shared_problem(fit: PointFit) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Residuals and Jacobian to take blocks from: the whole problem, or the shared one where sources are the blocks."""
    if fit.count < MINIMUM_BLOCKS:
        return fit.fitted.residuals, fit.fitted.jacobian
    return without_own_parameters(fit, fit.fitted.jacobian[:, :COMMON])


def errors_of(
    fit: PointFit, volume: NDArray[np.float64], *, voxel_mm: tuple[float, float, float], labels: NDArray[np.int64]
) -> PointErrors:
    """Standard errors of the two sigmas.

    Parameters
    ----------
    fit
        A fit of sources.
    volume, voxel_mm
        The image and its voxel sizes, mm.
    labels
        From `source_blocks`.

    Returns
    -------
    PointErrors
        With fewer than 12 empty parts the jackknife alone counts, and only where its blocks are wider than the noise's
        correlation, or are whole sources.
    """
    residuals, jacobian = shared_problem(fit)
    spread = block_jackknife(residuals, jacobian=jacobian, blocks=labels)
    patches = _background_patches(fit, volume, voxel_mm)
    if len(patches) >= MINIMUM_BLOCKS:
        per_source = np.sqrt(np.mean(patches**2, axis=0))
        total = np.sqrt(np.sum(per_source**2, axis=0))
        # The mean over a source's voxels is fitted, so the patches' own mean is no free parameter: df is their number.
        df = np.full(COMMON, float(len(patches) - 1))
        told_by = "background"
        if spread.se is not None and spread.df is not None:
            larger = spread.se[:COMMON] > total
            told_by = "blocks" if np.all(larger) else "background"
            total = np.where(larger, spread.se[:COMMON], total)
            df = np.where(larger, spread.df[:COMMON], df)
        return PointErrors(total, df, told_by, spread.blocks, len(patches), per_source)
    if spread.se is not None and spread.df is not None and _blocks_are_wide(fit, volume.shape, voxel_mm):
        return PointErrors(
            spread.se[:COMMON], np.maximum(spread.df[:COMMON], 1.0), "blocks", spread.blocks, len(patches), None
        )
    return PointErrors(None, None, None, spread.blocks, len(patches), None)


def _blocks_are_wide(fit: PointFit, shape: tuple[int, ...], voxel_mm: tuple[float, float, float]) -> bool:
    if fit.count >= MINIMUM_BLOCKS:
        return True
    peak = max(float(fit.source(k)[3]) for k in range(fit.count))
    if float(np.std(fit.fitted.residuals)) < 1e-4 * peak:
        return True  # no noise at all
    size = (shape[0], shape[1], shape[2])
    widths = correlation_width(fit.fitted.residuals, index=fit.index, shape=size, voxel_mm=voxel_mm)
    octant = 2.5 * float(min(fit.fitted.parameters[0], fit.fitted.parameters[1]))
    return octant > 2.0 * max(widths)


def _background_patches(
    fit: PointFit, volume: NDArray[np.float64], voxel_mm: tuple[float, float, float]
) -> NDArray[np.float64]:
    """What each source's part of the fit makes of empty places: shape (patches, sources, 2), sigma errors in mm."""
    jacobian = fit.fitted.jacobian
    scale = np.sqrt(np.sum(jacobian**2, axis=0))
    scaled = jacobian / scale
    response = np.linalg.solve(scaled.T @ scaled, scaled.T)[:COMMON] / scale[:COMMON, None]
    occupied = np.zeros(volume.shape, dtype=bool)
    occupied.ravel()[fit.index] = True
    first_windows = [np.array(np.unravel_index(fit.index[fit.owner == k], volume.shape)) for k in range(fit.count)]
    half = np.max([np.ceil(np.ptp(w, axis=1) / 2).astype(int) for w in first_windows], axis=0)
    box = np.ones(2 * half + 1, dtype=bool)
    if np.any(np.array(volume.shape) < np.array(box.shape)):
        return np.zeros((0, fit.count, COMMON))
    blocked = ndimage.maximum_filter(occupied, size=box.shape, mode="nearest")
    # Each further patch stands clear of the sources; neighbours overlap by at most their faint outer quarter.
    grids = [np.arange(h, n - h, max(1, int(1.5 * h))) for h, n in zip(half, volume.shape, strict=True)]
    centres = np.stack(np.meshgrid(*grids, indexing="ij"), axis=-1).reshape(-1, 3)
    centres = centres[~blocked[tuple(centres.T)]]
    if len(centres) > MOST_PATCHES:
        centres = centres[np.linspace(0, len(centres) - 1, MOST_PATCHES).astype(int)]
    if not len(centres):
        return np.zeros((0, fit.count, COMMON))
    found = np.zeros((len(centres), fit.count, COMMON))
    for which, window in enumerate(first_windows):
        middle = np.round((window.max(axis=1) + window.min(axis=1)) / 2).astype(int)
        relative = window - middle[:, None]
        mine = response[:, fit.owner == which]
        for p, centre in enumerate(centres):
            place = relative + centre[:, None]
            found[p, which] = mine @ volume[tuple(place)]
    return found
