"""Closed forms of objects blurred by a Gaussian, and widths read off profiles, for the reference checks.

Nothing here comes from the library under test. Lengths are in mm; `sigma` belongs to the Gaussian.
"""

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import interpolate, optimize, special

FWHM_PER_SIGMA = 2.0 * np.sqrt(2.0 * np.log(2.0))

Array = NDArray[np.float64]


def slab_centre(size: ArrayLike, fwhm: ArrayLike) -> Array:
    """Centre of a slab of thickness `size`: erf(a), a = R / (sqrt 2 sigma)."""
    return special.erf(_a(size, fwhm))


def disc_centre(size: ArrayLike, fwhm: ArrayLike) -> Array:
    """Centre of a disc of diameter `size`: 1 - exp(-a^2)."""
    return 1.0 - np.exp(-(_a(size, fwhm) ** 2))


def sphere_centre(size: ArrayLike, fwhm: ArrayLike) -> Array:
    """Centre of a sphere of diameter `size`: erf(a) - 2 / sqrt(pi) a exp(-a^2)."""
    a = _a(size, fwhm)
    return special.erf(a) - 2.0 / np.sqrt(np.pi) * a * np.exp(-(a**2))


def sphere_profile(distance: ArrayLike, *, radius: float, sigma: float) -> Array:
    """A sphere of activity 1 at a distance (over 0) from its centre."""
    r = np.asarray(distance, dtype=float)
    near, far = (radius - r) / (np.sqrt(2) * sigma), (radius + r) / (np.sqrt(2) * sigma)
    return 0.5 * (special.erf(near) + special.erf(far)) - sigma / (r * np.sqrt(2 * np.pi)) * (
        np.exp(-(near**2)) - np.exp(-(far**2))
    )


def crossings(position: Array, values: Array, level: float) -> list[float]:
    """Where a finely sampled smooth curve takes a level, by cubic splines."""
    curve = interpolate.CubicSpline(position, values - level)
    return [float(root) for root in np.sort(curve.roots(extrapolate=False))]


def straight_edge(distance: Array, values: Array, *, start: tuple[float, float]) -> tuple[float, float]:
    """Place and FWHM of the falling error function that fits a profile best; `start` is a guess of both."""

    def misfit(p: Array) -> Array:
        return 0.5 * special.erfc((distance - p[0]) / (np.sqrt(2.0) * p[1])) - values

    best = optimize.least_squares(misfit, [start[0], start[1] / FWHM_PER_SIGMA], xtol=1e-13, ftol=1e-13).x
    return float(best[0]), float(best[1] * FWHM_PER_SIGMA)


def moment_width(position: Array, values: Array) -> float:
    """FWHM of the Gaussian with the variance that a peak has."""
    weight = values / values.sum()
    mean = np.sum(weight * position)
    return float(FWHM_PER_SIGMA * np.sqrt(np.sum(weight * (position - mean) ** 2)))


def quadrature(*widths: float) -> float:
    """Width of Gaussians convolved with each other."""
    return float(np.sqrt(np.sum(np.square(widths))))


def missing(measured: float, target: float) -> float:
    """Width that takes `measured` to `target`."""
    return float(np.sqrt(target**2 - measured**2))


def _a(size: ArrayLike, fwhm: ArrayLike) -> Array:
    return np.asarray(size, dtype=float) / 2.0 / (np.sqrt(2.0) * np.asarray(fwhm, dtype=float) / FWHM_PER_SIGMA)
