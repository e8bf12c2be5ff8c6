"""What a common width costs: how much of a small structure is still seen, and what noise is left.

Recovery is the value at the middle of a structure of activity 1 in a cold background, after a Gaussian blur: without
noise, walls or voxel averaging.
"""

from math import erf, exp, pi, sqrt

import numpy as np

from evenblur.widths import sigma_from_fwhm

_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(64)
_FAR_SIGMAS = 8.0


def slab_recovery(thickness_mm: float, *, fwhm_mm: float) -> float:
    """Value in the middle of a wide flat slab, such as a ribbon of cortex: erf(a), a = thickness / (2 sqrt(2) sigma).

    Parameters
    ----------
    thickness_mm
        Thickness of the slab, mm.
    fwhm_mm
        Width of the blur across the slab, mm; 0 for none.

    Raises
    ------
    ValueError
        If the thickness is not positive or the width negative.

    >>> round(slab_recovery(6.0, fwhm_mm=6.0), 6)
    0.760968
    """
    _check(thickness_mm, fwhm_mm)
    return 1.0 if fwhm_mm == 0 else erf(thickness_mm / (2.0 * sqrt(2.0) * sigma_from_fwhm(fwhm_mm)))


def sphere_recovery(diameter_mm: float, *, in_plane_mm: float, axial_mm: float) -> float:
    """Value in the middle of a sphere, blurred by a Gaussian of one width across the bed and another along it.

    Parameters
    ----------
    diameter_mm
        Diameter of the sphere, mm.
    in_plane_mm, axial_mm
        Widths of the blur, mm; 0 for none.

    Raises
    ------
    ValueError
        If the diameter is not positive or a width negative.

    Notes
    -----
    With equal widths erf(a) - (2 / sqrt(pi)) a exp(-a^2), a = R / (sqrt(2) sigma) (Kessler, Ellis and Eden 1984). With
    unequal ones the discs of the sphere, each 1 - exp(-r^2 / (2 sigma^2)), are summed along the bed.

    >>> round(sphere_recovery(8.0, in_plane_mm=8.0, axial_mm=8.0), 6)
    0.291249
    """
    _check(diameter_mm, in_plane_mm)
    _check(diameter_mm, axial_mm)
    radius = diameter_mm / 2.0
    across, along = sigma_from_fwhm(in_plane_mm), sigma_from_fwhm(axial_mm)
    if along == 0:
        return 1.0 if across == 0 else 1.0 - exp(-(radius**2) / (2.0 * across**2))
    if across == along:
        a = radius / (sqrt(2.0) * across)
        return erf(a) - 2.0 / sqrt(pi) * a * exp(-(a**2))
    half = min(radius, _FAR_SIGMAS * along)
    height = half * _NODES
    disc = np.ones_like(height) if across == 0 else -np.expm1(-(radius**2 - height**2) / (2.0 * across**2))
    weight = np.exp(-0.5 * (height / along) ** 2) / (along * sqrt(2.0 * pi))
    return min(float(half * np.sum(_WEIGHTS * weight * disc)), 1.0)  # the sum may round above it


def correlated_noise_factor(correlation_mm: tuple[float, float], *, in_plane_mm: float, axial_mm: float) -> float:
    """What the standard deviation of correlated noise is multiplied by, for kernels wide against the voxels.

    Noise with a Gaussian autocorrelation of FWHM c is white noise smoothed by a Gaussian of FWHM c / sqrt(2). A further
    kernel k lowers its variance, an axis at a time, by (c / sqrt(2)) / sqrt(c^2 / 2 + k^2): it helps less than against
    white noise, because neighbouring voxels rise and fall together already.

    Parameters
    ----------
    correlation_mm
        Full width at half maximum of the noise's autocorrelation in-plane and axial, mm.
    in_plane_mm, axial_mm
        Kernel, mm.

    Raises
    ------
    ValueError
        If a correlation is not positive or a kernel negative.

    >>> round(correlated_noise_factor((4.0, 4.0), in_plane_mm=0.0, axial_mm=0.0), 6)
    1.0
    """
    factor = 1.0
    for own, kernel, axes in zip(correlation_mm, (in_plane_mm, axial_mm), (2, 1), strict=True):
        _check(own, kernel)
        filtered = own / sqrt(2.0)
        factor *= (filtered / sqrt(filtered**2 + kernel**2)) ** (axes / 2.0)
    return factor


def _check(length_mm: float, fwhm_mm: float) -> None:
    if not length_mm > 0 or not fwhm_mm >= 0:
        raise ValueError(f"a length must be positive and a width not negative: {length_mm} mm, {fwhm_mm} mm")
