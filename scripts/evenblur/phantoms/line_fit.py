"""The joint fit of blurred lines: one width for all, a place, slope and bend for each.

What a line's own slice says of the axial sigma_z is scaled by tan² of the tilt: nothing for a straight line. It is
fitted along as a nuisance, held near sigma by what is known of scanners in general.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from evenblur.phantoms.base import MeasurementError
from evenblur.phantoms.blocks import correlation_width
from evenblur.phantoms.cylinder_fit import PRIOR_SPREAD
from evenblur.phantoms.fitting import Fitted, Model, least_squares
from evenblur.phantoms.line_finding import Line, Lines
from evenblur.phantoms.line_model import (
    COMMON,
    PER_LINE,
    RATIO,
    SIGMA,
    LineSample,
    Solved,
    axis_at,
    disc_nodes,
    evaluate,
    from_line,
)
from evenblur.phantoms.point_fit import LARGEST_FWHM_MM, WINDOW
from evenblur.statistics import shortfall
from evenblur.widths import FWHM_PER_SIGMA, sigma_from_fwhm

MOST_VOXELS = 120_000
"""Beyond this number slices are left out: neighbouring ones tell nearly the same."""
_FEWEST_FOR_BEND = 8


@dataclass(frozen=True)
class LineFit:
    """Optimum. `fitted` has one row more than there are voxels: the held ratio of the two sigmas.

    Residuals and Jacobian are those of the problem without the amplitudes. `free` marks the parameters that were
    fitted; the Jacobian holds only their columns.
    """

    fitted: Fitted
    parameters: NDArray[np.float64]
    free: NDArray[np.intp]
    sample: LineSample
    solved: Solved
    noise: float
    correlation_mm: tuple[float, float]

    def line(self, which: int) -> NDArray[np.float64]:
        """The seven parameters of a line."""
        first = COMMON + PER_LINE * which
        return self.parameters[first : first + PER_LINE]

    def offsets(self) -> NDArray[np.float64]:
        """Each voxel's in-plane position from its own line, shape (2, n), mm."""
        found = np.empty((2, self.sample.values.size))
        for k in range(self.sample.count):
            mine = self.sample.owner == k
            found[:, mine] = from_line(self.line(k), self.sample, k, mine)[0]
        return found

    def peaks(self) -> NDArray[np.float64]:
        """Amplitude of each voxel's own line in its slice, shape (n,)."""
        return np.asarray(self.solved.amplitudes[self.slice_of_voxel(), self.sample.owner])

    def slice_of_voxel(self) -> NDArray[np.intp]:
        """Place of each voxel's slice in `sample.slices`, shape (n,)."""
        return np.repeat(np.arange(self.sample.slices.size), np.diff(self.sample.starts))


def fit_lines(
    volume: NDArray[np.float64], *, voxel_mm: tuple[float, float, float], found: Lines, diameter_mm: float
) -> LineFit:
    """Fit all lines together.

    Parameters
    ----------
    volume
        Image, shape (x, y, z).
    voxel_mm
        Voxel sizes, mm.
    found
        From `find_lines`.
    diameter_mm
        Inner diameter of the capillaries; 0 for lines without thickness.

    Returns
    -------
    LineFit

    Raises
    ------
    MeasurementError
        If the fit does not come to rest at a width that makes sense.
    """
    sigma = sigma_from_fwhm(found.fwhm_mm)
    rows = [[*line.centre_mm, *line.slope, 0.0, 0.0, found.background] for line in found.lines]
    parameters = np.concatenate([[sigma, 0.0], *rows])
    nodes = disc_nodes(diameter_mm)
    noise, correlation = 0.0, (max(voxel_mm[:2]), voxel_mm[2])
    result: LineFit | None = None
    for attempt in range(6):
        sample = _windows(volume, voxel_mm, parameters, found.lines, diameter_mm)
        if attempt == 0:
            # Before the first residuals: hold the ratio as noise of 1 % of the range would.
            noise = 0.01 * float(np.ptp(sample.values))
        result = _fit_sample(sample, parameters, nodes, noise / PRIOR_SPREAD, voxel_mm)
        before, parameters = parameters, result.parameters
        last, (noise, correlation) = noise, _noise_of(result, volume.shape, voxel_mm)
        result = LineFit(result.fitted, parameters, result.free, result.sample, result.solved, noise, correlation)
        change = np.abs(parameters[SIGMA] / before[SIGMA] - 1.0)
        if change < 0.03 and attempt > 0 and 0.5 < noise / last < 2.0:
            break
    assert result is not None
    sensible = 0.16 * min(voxel_mm[:2]) < parameters[SIGMA] < 0.99 * sigma_from_fwhm(1.5 * LARGEST_FWHM_MM)
    left = float(np.sqrt(np.mean(result.fitted.residuals**2)))
    exact = left < 1e-6 * float(np.max(np.abs(result.peaks())))  # nothing but rounding is left to lower
    if not (result.fitted.converged or exact) or not sensible:
        raise MeasurementError("no blurred line source could be fitted to the image")
    return result


def _noise_of(
    fit: LineFit, shape: tuple[int, ...], voxel_mm: tuple[float, float, float]
) -> tuple[float, tuple[float, float]]:
    """Noise of one voxel as if uncorrelated, to the same information; and the noise's correlation widths (mm)."""
    size = (shape[0], shape[1], shape[2])
    residuals = fit.fitted.residuals[:-1]
    peak = max(float(np.max(fit.peaks())), 1e-300)
    rms = float(np.sqrt(np.mean(residuals**2)))
    if rms < 1e-3 * peak:
        # No noise: what is left is the model's last digits.
        return max(rms, 1e-4 * peak), (max(voxel_mm[:2]), voxel_mm[2])
    # What the model misses alike in every slice is no noise: mean along the line, by place in the window.
    widths = []
    offset = fit.offsets()
    for k in range(fit.sample.count):
        mine = fit.sample.owner == k
        place = np.round(offset[:, mine] / np.array(voxel_mm[:2])[:, None]).astype(int)
        key = (place[0] - place[0].min()) * 1000 + place[1] - place[1].min()
        left = residuals[mine] - (np.bincount(key, residuals[mine]) / np.maximum(np.bincount(key), 1))[key]
        widths.append(correlation_width(left, index=fit.sample.index[mine], shape=size, voxel_mm=voxel_mm))
    in_plane, axial = np.median(widths, axis=0)
    misfit = min(1.0, 0.05 * peak / rms)
    told = _slab_noise(fit, float(axial))
    if told is not None:
        return told * misfit, (float(in_plane), float(axial))
    # A Gaussian autocorrelation of FWHM w has the integral 1.064 w: the most that correlated noise can add up to.
    steps = np.array([voxel_mm[0], voxel_mm[1], voxel_mm[2]])
    together = float(np.prod(np.maximum(1.064 * np.array([in_plane, in_plane, axial]) / steps, 1.0)))
    return rms * misfit * float(np.sqrt(together)), (float(in_plane), float(axial))


def _slab_noise(fit: LineFit, correlation_mm: float) -> float | None:
    """Noise that, uncorrelated, would move sigma as much as the sums over slabs do; None with under eight slabs."""
    column = fit.fitted.jacobian[:-1, SIGMA]
    slab_mm = 1.5 * correlation_mm  # short, so that there are many; what neighbours share is made up for
    slab = np.floor((fit.sample.points[2] - fit.sample.points[2].min()) / slab_mm).astype(np.intp)
    group = slab * fit.sample.count + fit.sample.owner
    sums = np.bincount(group, column * fit.fitted.residuals[:-1])
    used = int(np.unique(group).size)
    if used < 8:
        return None
    # The sums' own total is zero at the optimum: one degree of freedom.
    kept = shortfall(correlation_mm, block_mm=slab_mm) * (used - 1) / used
    return float(np.sqrt(np.sum(sums**2) / kept / np.sum(column**2)))


def _windows(
    volume: NDArray[np.float64],
    voxel_mm: tuple[float, float, float],
    parameters: NDArray[np.float64],
    lines: tuple[Line, ...],
    diameter: float,
) -> LineSample:
    """Voxels within 4 sigmas of a line (at least 3 voxels) in its slices; each belongs to the nearest line."""
    sigma, sigma_z = parameters[SIGMA], parameters[SIGMA] * np.exp(parameters[RATIO])
    x, y = np.arange(volume.shape[0]) * voxel_mm[0], np.arange(volume.shape[1]) * voxel_mm[1]
    middle = np.array([0.5 * (line.first + line.last) * voxel_mm[2] for line in lines])
    half = np.array([max(0.5 * (line.last - line.first), 0.5) * voxel_mm[2] for line in lines])
    per_line = parameters[COMMON:].reshape(-1, PER_LINE)
    index: list[NDArray[np.intp]] = []
    owner: list[NDArray[np.intp]] = []
    slices: list[int] = []
    used = np.unique(np.concatenate([np.arange(line.first, line.last + 1) for line in lines]))
    area = np.pi * (WINDOW * sigma) ** 2 / (voxel_mm[0] * voxel_mm[1]) * len(lines)
    used = used[:: max(1, int(np.ceil(used.size * area / MOST_VOXELS)))]
    for k in used:
        nearest = np.full(volume.shape[:2], np.inf)
        mine = np.full(volume.shape[:2], -1, dtype=np.intp)
        for which, line in enumerate(lines):
            if not line.first <= k <= line.last:
                continue
            cx, cy = axis_at(per_line[which], (k * voxel_mm[2] - middle[which]), half[which])
            t2 = float(per_line[which, 2] ** 2 + per_line[which, 3] ** 2)
            reach = max(WINDOW * np.sqrt(sigma**2 + sigma_z**2 * t2) + 0.5 * diameter, 3.0 * max(voxel_mm[:2]))
            distance = np.hypot((x - cx)[:, None], y - cy)
            near = (distance < reach) & (distance < nearest)
            nearest[near] = distance[near]
            mine[near] = which
        inside = np.flatnonzero(mine.ravel() >= 0)
        if inside.size:
            index.append(inside * volume.shape[2] + k)
            owner.append(mine.ravel()[inside])
            slices.append(int(k))
    if not index or sum(i.size for i in index) < 4 * parameters.size:
        raise MeasurementError("the lines lie too close to the image's border, or cover too few voxels")
    flat = np.concatenate(index)
    where = np.unravel_index(flat, volume.shape)
    points = np.stack([w * step for w, step in zip(where, voxel_mm, strict=True)])
    starts = np.concatenate([[0], np.cumsum([i.size for i in index])])
    return LineSample(
        volume.ravel()[flat], points, np.concatenate(owner), flat, starts, np.array(slices), lines, middle, half
    )


def own_widths(fit: LineFit, *, voxel_mm: tuple[float, float, float], diameter_mm: float) -> NDArray[np.float64]:
    """Each line's own in-plane width (FWHM, mm), shape (lines,): fitted alone, the others taken out of the data."""
    if fit.sample.count == 1:
        return np.array([width_mm(fit)])
    sample, place = fit.sample, fit.slice_of_voxel()
    found = []
    for k in range(sample.count):
        mine = np.flatnonzero(sample.owner == k)
        others = [j for j in range(sample.count) if j != k]
        tails = np.sum(fit.solved.amplitudes[place[mine]][:, others] * fit.solved.shapes[mine][:, others], axis=1)
        slices, starts = np.unique(place[mine], return_index=True)
        alone = LineSample(
            sample.values[mine] - tails,
            sample.points[:, mine],
            np.zeros(mine.size, dtype=np.intp),
            sample.index[mine],
            np.append(starts, mine.size),
            sample.slices[slices],
            (sample.lines[k],),
            sample.middle_mm[[k]],
            sample.half_mm[[k]],
        )
        first = np.concatenate([fit.parameters[:COMMON], fit.line(k)])
        found.append(width_mm(_fit_sample(alone, first, disc_nodes(diameter_mm), fit.noise / PRIOR_SPREAD, voxel_mm)))
    return np.array(found)


def _fit_sample(
    sample: LineSample,
    first: NDArray[np.float64],
    nodes: tuple[NDArray[np.float64], NDArray[np.float64]],
    weight: float,
    voxel_mm: tuple[float, float, float],
) -> LineFit:
    held = [
        COMMON + PER_LINE * k + j
        for k, line in enumerate(sample.lines)
        for j in (4, 5)
        if line.last - line.first + 1 < _FEWEST_FOR_BEND
    ]
    free = np.array([p for p in range(first.size) if p not in held])

    def full(reduced: NDArray[np.float64]) -> NDArray[np.float64]:
        everything = first.copy()
        everything[free] = reduced
        return everything

    def model(reduced: NDArray[np.float64], *, even: bool = False) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        p = full(reduced)
        residuals, jacobian, _ = evaluate(p, sample, nodes, even=even)
        row = np.zeros(p.size)
        row[RATIO] = weight
        return np.append(residuals, -weight * p[RATIO]), np.vstack([jacobian, row])[:, free]

    lower, upper = np.full(first.size, -np.inf), np.full(first.size, np.inf)
    lower[SIGMA], upper[SIGMA] = 0.15 * min(voxel_mm[:2]), sigma_from_fwhm(1.5 * LARGEST_FWHM_MM)
    lower[RATIO], upper[RATIO] = -4.0 * PRIOR_SPREAD, 4.0 * PRIOR_SPREAD
    fitted = least_squares(model, first[free], lower=lower[free], upper=upper[free])
    fitted = _with_even_weights(fitted, lambda reduced: model(reduced, even=True), lower[free], upper[free])
    parameters = full(fitted.parameters)
    _, _, solved = evaluate(parameters, sample, nodes)
    return LineFit(fitted, parameters, free, sample, solved, weight * PRIOR_SPREAD, (0.0, 0.0))


def _with_even_weights(fitted: Fitted, model: Model, lower: NDArray[np.float64], upper: NDArray[np.float64]) -> Fitted:
    """A few Gauss-Newton steps with the slices weighted by a smooth activity.

    A slice's own amplitude carries the noise that its residuals hold too; as a weight it would widen the lines by
    about the square of the noise.
    """
    parameters = fitted.parameters
    residuals, jacobian = model(parameters)
    for _ in range(6):
        scale = np.sqrt(np.maximum(np.sum(jacobian**2, axis=0), 1e-300))
        scaled = jacobian / scale
        step = np.linalg.lstsq(scaled.T @ scaled, scaled.T @ residuals, rcond=1e-12)[0] / scale
        parameters = np.clip(parameters + step, lower, upper)
        residuals, jacobian = model(parameters)
        if abs(step[SIGMA]) < 1e-6 * parameters[SIGMA]:
            break
    return Fitted(parameters, residuals, jacobian, fitted.converged and bool(np.all(np.isfinite(parameters))))


def width_mm(fit: LineFit) -> float:
    """The common in-plane width (FWHM, mm)."""
    return float(fit.parameters[SIGMA]) * FWHM_PER_SIGMA
