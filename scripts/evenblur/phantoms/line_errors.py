"""How sure a line's width is: slabs along the lines, and copies of the fit in the empty background.

A line is hardly wider than the noise's correlation, so its sides are no independent witnesses; slabs along it are.
Where short lines give fewer than 12, the fit's own linear response (one Gauss-Newton step), moved sideways as a whole
over empty parts of the image, shows what the noise does to the width.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from evenblur.phantoms.line_fit import LineFit
from evenblur.phantoms.line_model import SIGMA
from evenblur.statistics import MINIMUM_BLOCKS, Jackknife, block_jackknife, shortfall

MOST_PATCHES = 200
_WIDTHS = (6.0, 5.0, 4.0, 3.0)
"""How many correlation widths a slab should be long: the most that still gives enough of them."""
_ENOUGH = 24
_MOST_AMPLITUDES = 300


@dataclass(frozen=True)
class LineErrors:
    """Standard error (mm of sigma) and df of the common width, None if unknown, and where they come from.

    `labels` are the blocks for every further jackknife; `excess` is the factor for what neighbouring blocks have in
    common.
    """

    se: float | None
    df: float | None
    source: str | None
    blocks: int
    patches: int
    labels: NDArray[np.int64]
    excess: float


def errors_of(
    fit: LineFit,
    volume: NDArray[np.float64],
    *,
    voxel_mm: tuple[float, float, float],
    occupied: NDArray[np.bool_],
) -> LineErrors:
    """Standard error of the common sigma.

    Parameters
    ----------
    fit
        A fit of lines.
    volume, voxel_mm
        The image and its voxel sizes, mm.
    occupied
        Where anything bright is, shape of the image: no place for a copy of the fit.

    Returns
    -------
    LineErrors
        What an unknown axial width adds is included, in quadrature.
    """
    labels, slabs, excess = _slabs(fit, voxel_mm)
    pull = ratio_pull(fit)
    if slabs >= MINIMUM_BLOCKS:
        spread = jackknife_of(fit, fit.fitted.jacobian, labels)
        if spread.se is not None and spread.df is not None:
            se = float(np.hypot(excess * spread.se[SIGMA], pull))
            return LineErrors(se, float(max(spread.df[SIGMA], 1.0)), "slabs", spread.blocks, 0, labels, excess)
    labels, blocks = _sectors(fit, voxel_mm)
    inside = _sector_jackknife(fit, labels) if blocks >= MINIMUM_BLOCKS else Jackknife(None, None, blocks, None)
    patches = _background_patches(fit, volume, voxel_mm, occupied)
    if patches.size >= MINIMUM_BLOCKS:
        # Iterative reconstructions are quiet where nothing is: there the line's own parts know more of its noise.
        se, df, source = float(np.sqrt(np.mean(patches**2))), float(patches.size - 1), "background"
        if inside.se is not None and inside.df is not None and inside.se[SIGMA] > se:
            se, df, source = float(inside.se[SIGMA]), float(max(inside.df[SIGMA], 1.0)), "sectors"
        return LineErrors(float(np.hypot(se, pull)), df, source, blocks, patches.size, labels, 1.0)
    if inside.se is not None and inside.df is not None and _sectors_are_wide(fit):
        se = float(np.hypot(inside.se[SIGMA], pull))
        return LineErrors(se, float(max(inside.df[SIGMA], 1.0)), "sectors", blocks, patches.size, labels, 1.0)
    return LineErrors(None, None, None, blocks, int(patches.size), labels, 1.0)


def jackknife_of(fit: LineFit, design: NDArray[np.float64], labels: NDArray[np.int64]) -> Jackknife:
    """Block jackknife of the fit with this design; the held ratio's row is in no block."""
    return block_jackknife(fit.fitted.residuals, jacobian=design, blocks=np.append(labels, np.int64(-1)))


def ratio_pull(fit: LineFit) -> float:
    """How far (mm) sigma moves if the unseen axial width is off by its spread across scanners; 0 for straight lines."""
    jacobian = fit.fitted.jacobian
    scale = np.sqrt(np.maximum(np.sum(jacobian**2, axis=0), 1e-300))
    scaled = jacobian / scale
    return float(abs(np.linalg.solve(scaled.T @ scaled, scaled[-1] * fit.noise)[SIGMA] / scale[SIGMA]))


def _slabs(fit: LineFit, voxel_mm: tuple[float, float, float]) -> tuple[NDArray[np.int64], int, float]:
    """Labels of line × slab, their number, and the factor for what neighbouring slabs share."""
    correlation = fit.correlation_mm[1]
    heights = np.array([(line.last - line.first + 1) * voxel_mm[2] for line in fit.sample.lines])
    numbers = np.ones(heights.size, dtype=int)
    chosen = _WIDTHS[-1]
    for chosen in _WIDTHS:
        numbers = np.clip((heights / (chosen * correlation)).astype(int), 1, 40)
        if numbers.sum() >= _ENOUGH:
            break
    labels = np.full(fit.sample.values.size, -1, dtype=np.int64)
    place = np.round(fit.sample.points[2] / voxel_mm[2])
    first = 0
    for k, line in enumerate(fit.sample.lines):
        mine = fit.sample.owner == k
        share = (place[mine] - line.first) / (line.last - line.first + 1)
        labels[mine] = first + np.clip((share * numbers[k]).astype(int), 0, numbers[k] - 1)
        first += int(numbers[k])
    number = int(np.unique(labels).size)
    if np.any(heights < chosen * correlation):
        return labels, 0, 1.0  # a line shorter than one slab is no independent block
    kept = shortfall(correlation, block_mm=float(np.mean(heights / numbers)))
    return labels, number, float(1.0 / np.sqrt(kept))


def _sectors(fit: LineFit, voxel_mm: tuple[float, float, float]) -> tuple[NDArray[np.int64], int]:
    """Labels of line × slab × sector, as many slabs as twice the noise's correlation allows; and their number."""
    offset = fit.offsets()
    angle = np.arctan2(offset[1], offset[0]) / (2.0 * np.pi) + 0.5
    labels = np.full(offset.shape[1], -1, dtype=np.int64)
    place = np.round(fit.sample.points[2] / voxel_mm[2])
    spans = [line.last - line.first + 1 for line in fit.sample.lines]
    slabs = [max(1, int(n * voxel_mm[2] / (2.0 * fit.correlation_mm[1]))) for n in spans]
    slabs = [min(n, 24, span) for n, span in zip(slabs, spans, strict=True)]
    sectors = next((n for n in (2, 4, 6, 8, 12) if n * sum(slabs) >= MINIMUM_BLOCKS), 12)
    first = 0
    for k, line in enumerate(fit.sample.lines):
        mine = fit.sample.owner == k
        slab = np.clip(((place[mine] - line.first) / spans[k] * slabs[k]).astype(int), 0, slabs[k] - 1)
        sector = np.minimum((angle[mine] * sectors).astype(int), sectors - 1)
        # Neighbours differ in parity along and around the line, so that the two halves alternate in space.
        labels[mine] = first + slab * sectors + np.where(slab % 2 == 0, sector, sector ^ 1)
        first += slabs[k] * sectors
    return labels, int(np.unique(labels).size)


def _sector_jackknife(fit: LineFit, labels: NDArray[np.int64]) -> Jackknife:
    """Jackknife with blocks that share slices: the amplitudes stand in the design, since a block alone has not all."""
    amplitudes = fit.solved.shapes
    place = fit.slice_of_voxel()
    columns = []
    for k in range(fit.sample.slices.size):
        for which in range(fit.sample.count):
            column = np.where(place == k, amplitudes[:, which], 0.0)
            if column.max() > 1e-6:
                columns.append(np.append(column, 0.0))
        if len(columns) > _MOST_AMPLITUDES:
            return Jackknife(None, None, 0, None)
    return jackknife_of(fit, np.column_stack([fit.fitted.jacobian, *columns]), labels)


def _sectors_are_wide(fit: LineFit) -> bool:
    peak = float(np.max(fit.peaks()))
    if float(np.std(fit.fitted.residuals[:-1])) < 1e-3 * peak:
        return True  # no noise at all
    return 2.5 * float(fit.parameters[SIGMA]) > 2.0 * fit.correlation_mm[0]


def _background_patches(
    fit: LineFit,
    volume: NDArray[np.float64],
    voxel_mm: tuple[float, float, float],
    occupied: NDArray[np.bool_],
) -> NDArray[np.float64]:
    """What the fit makes of empty places: errors of sigma in mm, one for each sideways shift of all its lines."""
    jacobian = fit.fitted.jacobian
    scale = np.sqrt(np.maximum(np.sum(jacobian**2, axis=0), 1e-300))
    scaled = jacobian / scale
    response = np.linalg.solve(scaled.T @ scaled, scaled[:-1].T)[SIGMA] / scale[SIGMA]
    taken = occupied.ravel().copy()
    taken[fit.sample.index] = True
    flat = volume.ravel()
    where = np.stack(np.unravel_index(fit.sample.index, volume.shape))
    by_line: list[list[float]] = []
    for k in range(fit.sample.count):
        mine = fit.sample.owner == k
        here, weight = where[:, mine], response[mine]
        # Neighbouring copies overlap by at most their faint outer quarter.
        reach = np.max(np.abs(fit.offsets()[:, mine]), axis=1) / np.array(voxel_mm[:2])
        grids = []
        for axis in (0, 1):
            step = max(1, int(np.ceil(1.5 * reach[axis])))
            low, high = -int(here[axis].min()), volume.shape[axis] - 1 - int(here[axis].max())
            grids.append(np.concatenate([np.arange(0, low - 1, -step)[::-1], np.arange(step, high + 1, step)]))
        found: list[float] = []
        shifts = [(int(dx), int(dy)) for dx in grids[0] for dy in grids[1]]
        for dx, dy in shifts:
            index = fit.sample.index[mine] + (dx * volume.shape[1] + dy) * volume.shape[2]
            if not taken[index].any():
                found.append(float(weight @ flat[index]))
            if len(found) == MOST_PATCHES:
                break
        by_line.append(found)
    number = min(len(found) for found in by_line)
    if number < MINIMUM_BLOCKS:
        return np.zeros(number)
    # Lines are far apart beside the noise's correlation: their errors add as independent draws do.
    return np.sqrt(np.sum([np.asarray(found[:number]) ** 2 for found in by_line], axis=0))
