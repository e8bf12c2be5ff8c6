"""The blurred line's model: what every slice shows of an endless tilted line, and the best activity in each slice.

Within a slice an endless line with the slope t shows the blur projected along it: a Gaussian with the covariance
sigma² I + sigma_z² t t'. The activity is free in every slice; it is solved for, not iterated (variable projection).
"""

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from evenblur.phantoms.line_finding import Line

SIGMA, RATIO = 0, 1
COMMON = 2
"""The first parameters: sigma (mm), and ln(sigma_z / sigma). Then seven for each line."""
PER_LINE = 7
"""x, y (mm) in the middle slice, slopes, bends (mm at the ends against the middle), background."""


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


def axis_at(
    line: NDArray[np.float64], z: NDArray[np.float64] | float, half: float
) -> tuple[NDArray[np.float64] | float, NDArray[np.float64] | float]:
    """Place of the line's axis at z (mm, from its middle)."""
    arch = (z / half) ** 2
    return line[0] + line[2] * z + line[4] * arch, line[1] + line[3] * z + line[5] * arch


def from_line(
    line: NDArray[np.float64], sample: LineSample, which: int, rows: NDArray[np.bool_] | slice
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """In-plane offsets (2, n) from a line's axis, and z from its middle (n,), mm."""
    z = sample.points[2, rows] - sample.middle_mm[which]
    cx, cy = axis_at(line, z, float(sample.half_mm[which]))
    return np.stack([sample.points[0, rows] - cx, sample.points[1, rows] - cy]), z


def _even(amplitudes: NDArray[np.float64], sample: LineSample) -> NDArray[np.float64]:
    """Amplitudes (slices, lines) as parabolas along each line, where it is fitted."""
    smooth = amplitudes.copy()
    for which, line in enumerate(sample.lines):
        rows = (sample.slices >= line.first) & (sample.slices <= line.last)
        degree = 2 if np.count_nonzero(rows) > 4 else 0
        place = (sample.slices[rows] - line.first) / max(line.last - line.first, 1)
        smooth[rows, which] = np.polyval(np.polyfit(place, amplitudes[rows, which], degree), place)
    return np.maximum(smooth, 0.0)


def evaluate(
    parameters: NDArray[np.float64],
    sample: LineSample,
    nodes: tuple[NDArray[np.float64], NDArray[np.float64]],
    *,
    even: bool = False,
) -> tuple[NDArray[np.float64], NDArray[np.float64], Solved]:
    """Residuals (n,) and Jacobian (n, parameters) after the best amplitudes, and those amplitudes.

    Derivatives of a slice's amplitude by the other parameters are left out of the Jacobian (Kaufman 1975): at the
    optimum they are of the order of the residuals. `even`: with smooth activities along the lines in the Jacobian.
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
    weights = _even(amplitudes, sample) if even else amplitudes
    place = np.repeat(np.arange(sample.slices.size), np.diff(sample.starts))
    jacobian = np.zeros((n, parameters.size), order="F")
    for which, derivatives in enumerate(parts):
        for column, values in derivatives(weights[place, which]):
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
    offset, z = from_line(line, sample, which, slice(None))
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
