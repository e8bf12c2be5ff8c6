"""What a common width means for images: recovery of spheres by size, and transfer of detail by frequency.

Closed forms for a Gaussian blur of one width in all directions, and the transfer that a measured profile shows itself.
"""

from collections.abc import Sequence
from math import erf, exp, log, pi, sqrt

import numpy as np
from numpy.typing import NDArray
from scipy.special import j0

Array = NDArray[np.float64]

_SIGMAS_A_WIDTH = 2.0 * sqrt(2.0 * log(2.0))

SPHERES_MM = (5.0, 10.0, 13.0, 17.0, 22.0, 28.0, 37.0)
"""Inner diameters shown in the table: those of the NEMA NU 2 body phantom, and 5 mm for small structures."""


def centre_recovery(diameter_mm: float, *, fwhm_mm: float) -> float:
    """Share of its true value that the centre of a hot sphere in cold surroundings shows under a Gaussian blur.

    The three-dimensional Gaussian's share within the sphere's radius R: erf(a) − 2 a exp(−a²) / sqrt(pi) with
    a = R / (sigma sqrt(2)), the distribution function of a Maxwell distribution.

    Raises
    ------
    ValueError
        If the diameter or the width is not positive.

    >>> round(centre_recovery(8.0, fwhm_mm=8.0), 4)  # R = sigma sqrt(2 ln 2): the Maxwell distribution at 1.1774
    0.2912
    """
    _check(diameter_mm, fwhm_mm)
    a = diameter_mm / 2.0 * _SIGMAS_A_WIDTH / (fwhm_mm * sqrt(2.0))
    return erf(a) - 2.0 * a * exp(-a * a) / sqrt(pi)


def mean_recovery(diameter_mm: float, *, fwhm_mm: float) -> float:
    """Share of its true value that the mean within a hot sphere's own outline shows under a Gaussian blur.

    The mean over pairs of points of the sphere of the Gaussian of their distance: the integral of 4 pi r² g(r) times
    the share 1 − 3 r / (4 R) + r³ / (16 R³) of points that have their partner at distance r in the sphere too.

    Raises
    ------
    ValueError
        If the diameter or the width is not positive.

    >>> mean_recovery(300.0, fwhm_mm=1.0) > 0.98
    True
    """
    _check(diameter_mm, fwhm_mm)
    radius, sigma = diameter_mm / 2.0, fwhm_mm / _SIGMAS_A_WIDTH
    end = min(2.0 * radius, 9.0 * sigma)
    points, weights = np.polynomial.legendre.leggauss(80)
    r = (points + 1.0) * end / 2.0
    share = 1.0 - 3.0 * r / (4.0 * radius) + r**3 / (16.0 * radius**3)
    density = np.sqrt(2.0 / pi) * r**2 / sigma**3 * np.exp(-(r**2) / (2.0 * sigma**2))
    return float(np.sum(weights * density * share) * end / 2.0)


def gaussian_transfer(frequency_per_mm: Array, *, fwhm_mm: float) -> Array:
    """Modulation transfer of a Gaussian blur: exp(−2 pi² sigma² f²).

    >>> gaussian_transfer(np.array([0.0, 2 * log(2) / (pi * 8.0)]), fwhm_mm=8.0).round(6).tolist()
    [1.0, 0.5]
    """
    sigma = fwhm_mm / _SIGMAS_A_WIDTH
    transfer: Array = np.exp(-2.0 * (pi * sigma * frequency_per_mm) ** 2)
    return transfer


def edge_transfer(position_mm: Sequence[float], values: Sequence[float], *, frequency_per_mm: Array) -> Array:
    """Modulation transfer from a profile across an edge: the size of the Fourier integral of its slope.

    Parameters
    ----------
    position_mm, values
        Points of the profile in rising order, shape (points,), any unit.
    frequency_per_mm
        Where the transfer is wanted, shape (frequencies,), 1/mm.

    Returns
    -------
    Array
        Shape (frequencies,), 1 at frequency 0. The slope between two points counts as constant, and what that averages
        away, sin(pi f d) / (pi f d) for points d apart, is given back.

    Raises
    ------
    ValueError
        If there are fewer than three points, or the ends are alike so that there is no edge.

    >>> edge_transfer([-1.0, 0.0, 1.0], [0.0, 0.5, 1.0], frequency_per_mm=np.array([0.0])).tolist()
    [1.0]
    """
    x, y = np.asarray(position_mm, dtype=float), np.asarray(values, dtype=float)
    if x.size < 3 or y[-1] == y[0]:
        raise ValueError("a profile across an edge needs three points and two levels")
    steps, middles = np.diff(y), (x[1:] + x[:-1]) / 2.0
    waves = np.exp(-2j * pi * frequency_per_mm[:, None] * middles)
    found: Array = np.abs(waves @ steps) / abs(float(steps.sum()))
    return found / np.sinc(frequency_per_mm * float(np.median(np.diff(x))))


def radial_transfer(distance_mm: Sequence[float], values: Sequence[float], *, frequency_per_mm: Array) -> Array:
    """Modulation transfer from the profile of a point or a line by distance: its Hankel transform of order nought.

    Parameters
    ----------
    distance_mm, values
        Points of the profile in rising order from near the centre, shape (points,), any unit.
    frequency_per_mm
        Where the transfer is wanted, shape (frequencies,), 1/mm.

    Returns
    -------
    Array
        Shape (frequencies,), 1 at frequency 0.

    Raises
    ------
    ValueError
        If there are fewer than three points, or nothing lies under the profile.

    >>> radial_transfer([0.0, 1.0, 2.0], [1.0, 0.5, 0.0], frequency_per_mm=np.array([0.0])).tolist()
    [1.0]
    """
    r, y = np.asarray(distance_mm, dtype=float), np.asarray(values, dtype=float)
    if r.size < 3:
        raise ValueError("a profile by distance needs three points")
    if r[0] > 0:
        r, y = np.concatenate([[0.0], r]), np.concatenate([[y[0]], y])
    fine = np.linspace(0.0, r[-1], 801)
    weighted = np.interp(fine, r, y) * fine
    total = np.trapezoid(weighted, fine)
    if not total > 0:
        raise ValueError("nothing lies under the profile")
    found: Array = np.trapezoid(weighted * j0(2.0 * pi * frequency_per_mm[:, None] * fine), fine, axis=1) / total
    return found


def _check(diameter_mm: float, fwhm_mm: float) -> None:
    if not (diameter_mm > 0 and fwhm_mm > 0):
        raise ValueError(f"diameter and width must be positive: {diameter_mm} mm, {fwhm_mm} mm")
