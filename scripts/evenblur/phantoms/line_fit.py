"""The blurred line's model and its joint fit: one width for all lines, a place, slope and bend for each.

Within a slice an endless line with the slope t shows the blur projected along it: a Gaussian with the covariance
sigma² I + sigma_z² t t'. What a line's own slice says of the axial sigma_z is thus scaled by tan² of the tilt: nothing
for a straight line. It is fitted along as a nuisance, held near sigma by what is known of scanners in general.
The activity is free in every slice; it is solved for, not iterated (variable projection).
"""

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from evenblur.phantoms.base import MeasurementError
from evenblur.phantoms.blocks import correlation_width
from evenblur.phantoms.cylinder_fit import PRIOR_SPREAD
from evenblur.phantoms.fitting import Fitted, least_squares
from evenblur.phantoms.line_finding import Line, Lines
from evenblur.phantoms.point_fit import LARGEST_FWHM_MM, WINDOW
from evenblur.widths import FWHM_PER_SIGMA, sigma_from_fwhm

SIGMA, RATIO = 0, 1
COMMON = 2
"""The first parameters: sigma (mm), and ln(sigma_z / sigma). Then seven for each line."""
PER_LINE = 7
"""x, y (mm) in the middle slice, slopes, bends (mm at the ends against the middle), background."""
MOST_VOXELS = 120_000
"""Beyond this number slices are left out: neighbouring ones tell nearly the same."""
_FEWEST_FOR_BEND = 8


@dataclass(frozen=True)
class LineSample:
    """The windows' voxels, sorted by slice: values, positions (3, n; mm), owner line, index in the flattened image."""

    values: NDArray[np.float64]
    points: NDArray[np.float64]
    owner: NDArray[np.intp]
    index: NDArray[np.intp]
    starts: NDArray[np.intp]
    """First voxel of each slice, and the number of voxels at the end."""
    slices: NDArray[np.intp]
    lines: tuple[Line, ...]
    middle_mm: NDArray[np.float64]
    half_mm: NDArray[np.float64]

    @property
    def count(self) -> int:
        """Number of lines."""
        return len(self.lines)


@dataclass(frozen=True)
class Solved:
    """The model at some parameters: amplitude-free projector, shapes (n, lines) and amplitudes (slices, lines)."""

    bases: list[NDArray[np.float64]]
    starts: NDArray[np.intp]
    shapes: NDArray[np.float64]
    amplitudes: NDArray[np.float64]

    def project(self, columns: NDArray[np.float64]) -> NDArray[np.float64]:
        """What is left of columns (n,) or (n, k) once each slice's amplitudes are fitted to them."""
        left = np.array(columns, dtype=np.float64)
        for k, basis in enumerate(self.bases):
            rows = slice(self.starts[k], self.starts[k + 1])
            left[rows] -= basis @ (basis.T @ left[rows])
        return left


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
            found[:, mine] = _from_line(self.line(k), self.sample, k, mine)[0]
        return found

    def peaks(self) -> NDArray[np.float64]:
        """Amplitude of each voxel's own line in its slice, shape (n,)."""
        return np.asarray(self.solved.amplitudes[self.slice_of_voxel(), self.sample.owner])

    def slice_of_voxel(self) -> NDArray[np.intp]:
        """Place of each voxel's slice in `sample.slices`, shape (n,)."""
        return np.repeat(np.arange(self.sample.slices.size), np.diff(self.sample.starts))


def disc_nodes(diameter_mm: float) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Points (n, 2; mm) and weights (sum 1) that stand for a uniform disc: exact for polynomials of degree 7.

    Eight angles times four Gauss nodes in the squared radius; one point for diameter 0.

    >>> points, weights = disc_nodes(4.0)
    >>> round(float(weights @ points[:, 0] ** 2), 9)
    1.0
    """
    if diameter_mm <= 0.0:
        return np.zeros((1, 2)), np.ones(1)
    node, weight = np.polynomial.legendre.leggauss(4)
    radius = 0.5 * diameter_mm * np.sqrt(0.5 * (node + 1.0))
    angle = (np.arange(8) + 0.5) * np.pi / 4.0
    circle = np.stack([np.cos(angle), np.sin(angle)], axis=1)
    return (radius[:, None, None] * circle).reshape(-1, 2), np.repeat(0.5 * weight / 8.0, 8)


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
    told = _slab_noise(fit, 3.0 * float(axial))
    if told is not None:
        return told * misfit, (float(in_plane), float(axial))
    # A Gaussian autocorrelation of FWHM w has the integral 1.064 w: the most that correlated noise can add up to.
    steps = np.array([voxel_mm[0], voxel_mm[1], voxel_mm[2]])
    together = float(np.prod(np.maximum(1.064 * np.array([in_plane, in_plane, axial]) / steps, 1.0)))
    return rms * misfit * float(np.sqrt(together)), (float(in_plane), float(axial))


def _slab_noise(fit: LineFit, slab_mm: float) -> float | None:
    """Noise that, uncorrelated, would move sigma as much as the sums over slabs do; None with under eight slabs."""
    column = fit.fitted.jacobian[:-1, SIGMA]
    slab = np.floor((fit.sample.points[2] - fit.sample.points[2].min()) / slab_mm).astype(np.intp)
    group = slab * fit.sample.count + fit.sample.owner
    sums = np.bincount(group, column * fit.fitted.residuals[:-1])
    used = int(np.unique(group).size)
    if used < 8:
        return None
    # The sums' own total is zero at the optimum: one degree of freedom.
    return float(np.sqrt(np.sum(sums**2) * used / (used - 1) / np.sum(column**2)))


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
            cx, cy = _axis_at(per_line[which], (k * voxel_mm[2] - middle[which]), half[which])
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


def _axis_at(
    line: NDArray[np.float64], z: NDArray[np.float64] | float, half: float
) -> tuple[NDArray[np.float64] | float, NDArray[np.float64] | float]:
    """Place of the line's axis at z (mm, from its middle)."""
    arch = (z / half) ** 2
    return line[0] + line[2] * z + line[4] * arch, line[1] + line[3] * z + line[5] * arch


def _from_line(
    line: NDArray[np.float64], sample: LineSample, which: int, rows: NDArray[np.bool_] | slice
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """In-plane offsets (2, n) from a line's axis, and z from its middle (n,), mm."""
    z = sample.points[2, rows] - sample.middle_mm[which]
    cx, cy = _axis_at(line, z, float(sample.half_mm[which]))
    return np.stack([sample.points[0, rows] - cx, sample.points[1, rows] - cy]), z


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

    def model(reduced: NDArray[np.float64]) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        p = full(reduced)
        residuals, jacobian, _ = evaluate(p, sample, nodes)
        row = np.zeros(p.size)
        row[RATIO] = weight
        return np.append(residuals, -weight * p[RATIO]), np.vstack([jacobian, row])[:, free]

    lower, upper = np.full(first.size, -np.inf), np.full(first.size, np.inf)
    lower[SIGMA], upper[SIGMA] = 0.15 * min(voxel_mm[:2]), sigma_from_fwhm(1.5 * LARGEST_FWHM_MM)
    lower[RATIO], upper[RATIO] = -4.0 * PRIOR_SPREAD, 4.0 * PRIOR_SPREAD
    fitted = least_squares(model, first[free], lower=lower[free], upper=upper[free])
    parameters = full(fitted.parameters)
    _, _, solved = evaluate(parameters, sample, nodes)
    return LineFit(fitted, parameters, free, sample, solved, weight * PRIOR_SPREAD, (0.0, 0.0))


def evaluate(
    parameters: NDArray[np.float64], sample: LineSample, nodes: tuple[NDArray[np.float64], NDArray[np.float64]]
) -> tuple[NDArray[np.float64], NDArray[np.float64], Solved]:
    """Residuals (n,) and Jacobian (n, parameters) after the best amplitudes, and those amplitudes.

    Derivatives of a slice's amplitude by the other parameters are left out of the Jacobian (Kaufman 1975): at the
    optimum they are of the order of the residuals.
    """
    n = sample.values.size
    shapes = np.zeros((n, sample.count))
    parts: list[Callable[[NDArray[np.float64]], list[tuple[int, NDArray[np.float64]]]]] = []
    level = np.zeros(n)
    for which in range(sample.count):
        first = COMMON + PER_LINE * which
        level[sample.owner == which] = parameters[first + 6]
        shape, derivatives = _shape(parameters, sample, which, nodes)
        shapes[:, which] = shape
        parts.append(derivatives)
    raised = sample.values - level
    bases, amplitudes = _amplitudes(shapes, raised, sample)
    solved = Solved(bases, sample.starts, shapes, amplitudes)
    place = np.repeat(np.arange(sample.slices.size), np.diff(sample.starts))
    jacobian = np.zeros((n, parameters.size), order="F")
    for which, derivatives in enumerate(parts):
        for column, values in derivatives(amplitudes[place, which]):
            jacobian[:, column] += values
        jacobian[sample.owner == which, COMMON + PER_LINE * which + 6] = 1.0
    return solved.project(raised), solved.project(jacobian), solved


def _amplitudes(
    shapes: NDArray[np.float64], raised: NDArray[np.float64], sample: LineSample
) -> tuple[list[NDArray[np.float64]], NDArray[np.float64]]:
    """Orthonormal basis of each slice's shapes, and the lines' amplitudes there (slices, lines)."""
    bases = []
    amplitudes = np.zeros((sample.slices.size, sample.count))
    for k in range(sample.slices.size):
        rows = slice(sample.starts[k], sample.starts[k + 1])
        seen = np.flatnonzero(shapes[rows].max(axis=0) > 1e-6)
        basis, triangle = np.linalg.qr(shapes[rows][:, seen])
        amplitudes[k, seen] = np.linalg.lstsq(triangle, basis.T @ raised[rows], rcond=1e-12)[0]
        bases.append(basis)
    return bases, amplitudes


def _shape(
    parameters: NDArray[np.float64],
    sample: LineSample,
    which: int,
    nodes: tuple[NDArray[np.float64], NDArray[np.float64]],
) -> tuple[NDArray[np.float64], Callable[[NDArray[np.float64]], list[tuple[int, NDArray[np.float64]]]]]:
    """A line's section at every voxel (n,), and its derivatives, given the amplitudes, as (column, values)."""
    sigma, stretch = parameters[SIGMA], float(np.exp(parameters[RATIO]))
    first = COMMON + PER_LINE * which
    line = parameters[first : first + PER_LINE]
    slope = line[2:4]
    covariance = sigma**2 * (np.eye(2) + stretch**2 * np.outer(slope, slope))
    inverse = np.linalg.inv(covariance)
    # The section of a round capillary by the slice is longer along the tilt.
    ellipse = np.eye(2) + np.outer(slope, slope) / (1.0 + np.sqrt(1.0 + slope @ slope))
    offset, z = _from_line(line, sample, which, slice(None))
    known = sample.lines[which]
    height = sample.points[2]
    step = sample.half_mm[which] * 2.0 / max(known.last - known.first, 1)
    within = height >= sample.middle_mm[which] - sample.half_mm[which] - (known.first - known.seen_first + 0.5) * step
    within &= height <= sample.middle_mm[which] + sample.half_mm[which] + (known.seen_last - known.last + 0.5) * step
    near = np.flatnonzero(within & (np.einsum("in,ij,jn->n", offset, inverse, offset) < 100.0))
    offset, z = offset[:, near], z[near]
    arch = (z / sample.half_mm[which]) ** 2
    total, by_place, by_sigma, by_slope2 = np.zeros(near.size), np.zeros((2, near.size)), 0.0, np.zeros(near.size)
    by_tilt = np.zeros((2, near.size))
    for node, weight in zip(*nodes, strict=True):
        u = offset - (ellipse @ node)[:, None]
        v = inverse @ u
        part = weight * np.exp(-0.5 * np.sum(u * v, axis=0))
        along = slope @ v
        total += part
        by_place += part * v
        by_sigma = by_sigma + part * np.sum(u * v, axis=0) / sigma
        by_slope2 += part * along**2
        by_tilt += part * along * v
    sigma_z2 = (sigma * stretch) ** 2
    shape = np.zeros(sample.values.size)
    shape[near] = total

    def derivatives(amplitude: NDArray[np.float64]) -> list[tuple[int, NDArray[np.float64]]]:
        scale = amplitude[near]

        def column(values: NDArray[np.float64]) -> NDArray[np.float64]:
            everything = np.zeros(shape.size)
            everything[near] = scale * values
            return everything

        found = [(SIGMA, column(np.asarray(by_sigma))), (RATIO, column(sigma_z2 * by_slope2))]
        for axis in (0, 1):
            found.append((first + axis, column(by_place[axis])))
            found.append((first + 2 + axis, column(by_place[axis] * z + sigma_z2 * by_tilt[axis])))
            found.append((first + 4 + axis, column(by_place[axis] * arch)))
        return found

    return shape, derivatives


def width_mm(fit: LineFit) -> float:
    """The common in-plane width (FWHM, mm)."""
    return float(fit.parameters[SIGMA]) * FWHM_PER_SIGMA
