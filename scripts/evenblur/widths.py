"""Widths of Gaussians: full width at half maximum (FWHM), sigma, and their addition in quadrature.

All widths are in millimetres unless a name says otherwise.
"""

from math import log, sqrt

FWHM_PER_SIGMA = 2.0 * sqrt(2.0 * log(2.0))
"""FWHM of a Gaussian with sigma 1 (2.3548...): solve exp(-x^2 / 2) = 1 / 2."""


def sigma_from_fwhm(fwhm_mm: float) -> float:
    """Sigma (mm) of the Gaussian with this full width at half maximum (mm).

    >>> round(sigma_from_fwhm(8.0), 4)
    3.3973
    """
    return fwhm_mm / FWHM_PER_SIGMA


def fwhm_from_sigma(sigma_mm: float) -> float:
    """Full width at half maximum (mm) of the Gaussian with this sigma (mm).

    >>> round(fwhm_from_sigma(1.0), 4)
    2.3548
    """
    return sigma_mm * FWHM_PER_SIGMA


def missing_width(measured_mm: float, target_mm: float) -> float:
    """Kernel width (mm) that brings a measured width to the target: variances of Gaussians add.

    Zero where the measured width has reached the target already.

    Raises
    ------
    ValueError
        If a width is negative.

    >>> missing_width(3.0, 5.0)
    4.0
    """
    if measured_mm < 0 or target_mm < 0:
        raise ValueError(f"widths must not be negative: measured {measured_mm} mm, target {target_mm} mm")
    return sqrt(max(target_mm**2 - measured_mm**2, 0.0))
