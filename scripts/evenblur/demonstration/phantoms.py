"""Noise-free images of phantoms, blurred exactly and sampled at voxel centres."""

from itertools import product
from math import cos, hypot, radians, sin, sqrt

import numpy as np
from scipy.special import chndtr, ndtr

from evenblur.widths import fwhm_from_sigma, sigma_from_fwhm

_TABLE_MM = 0.02
_REACH_SIGMAS = 6.5


def disc_profile(radius_mm: float, *, sigma_mm: float) -> tuple[np.ndarray, np.ndarray]:
    """Radial profile of a unit disc blurred with a round Gaussian.

    The value at r is the chance that a Gaussian step from r ends inside the disc: the squared distance over sigma²
    follows the non-central chi-square law with two degrees of freedom and non-centrality r² / sigma².

    Parameters
    ----------
    radius_mm
        Radius of the disc, mm.
    sigma_mm
        Sigma of the Gaussian, mm.

    Returns
    -------
    tuple of numpy.ndarray
        Distances from the centre (mm) and values there, from far inside the edge to far outside it.

    >>> distance, value = disc_profile(50.0, sigma_mm=2.0)
    >>> float(value[0]), round(float(value[-1]), 6)
    (1.0, 0.0)
    """
    reach = _REACH_SIGMAS * sigma_mm
    distance = np.arange(max(radius_mm - reach, 0.0), radius_mm + reach + _TABLE_MM, _TABLE_MM)
    value = chndtr((radius_mm / sigma_mm) ** 2, 2.0, (distance / sigma_mm) ** 2)
    # The series breaks off in the far tails; the probability there is below 1e-9 of 0 or 1.
    value = np.where(distance < radius_mm - 6.2 * sigma_mm, 1.0, value)
    return distance, np.where(distance > radius_mm + 6.2 * sigma_mm, 0.0, value)


def cylinder_image(
    *,
    sample_axes_mm: tuple[np.ndarray, np.ndarray, np.ndarray],
    radius_mm: float,
    length_mm: float,
    centre_mm: tuple[float, float, float],
    tilt_deg: float,
    lean_deg: float,
    in_plane_mm: float,
    axial_mm: float,
) -> np.ndarray:
    """A filled cylinder of activity 1 with flat ends, blurred and sampled.

    A round Gaussian looks alike in every frame, so in the cylinder's own frame the blurred cylinder is a blurred disc
    times two blurred ends, however the cylinder leans. What one of the two widths has beyond the other is added as a
    Gauss-Hermite sum of shifted copies, which is exact for this purpose: the copies are smooth on the scale of the
    shifts.

    Parameters
    ----------
    sample_axes_mm
        Sample positions along x, y, z, mm.
    radius_mm, length_mm, centre_mm
        Size and centre of the cylinder, mm.
    tilt_deg, lean_deg
        Angle between the cylinder and the z axis, and the direction it leans to (from x towards y), degrees.
    in_plane_mm, axial_mm
        Widths (FWHM) of the blur across and along z, mm.

    Returns
    -------
    numpy.ndarray
        Samples, float64, shape (nx, ny, nz).

    >>> at = (np.array([0.0, 50.0]), np.zeros(1), np.zeros(1))
    >>> cylinder_image(sample_axes_mm=at, radius_mm=50.0, length_mm=90.0, centre_mm=(0.0, 0.0, 0.0), tilt_deg=0.0,
    ...                lean_deg=0.0, in_plane_mm=5.0, axial_mm=5.0).round(2).ravel().tolist()
    [1.0, 0.49]
    """
    sigma = sigma_from_fwhm(min(in_plane_mm, axial_mm))
    extra = sigma_from_fwhm(sqrt(abs(in_plane_mm**2 - axial_mm**2)))
    distance, value = disc_profile(radius_mm, sigma_mm=sigma)
    across, along = cos(radians(lean_deg)), sin(radians(lean_deg))
    lean, upright = sin(radians(tilt_deg)), cos(radians(tilt_deg))
    x, y, z = np.meshgrid(*(axis - c for axis, c in zip(sample_axes_mm, centre_mm, strict=True)), indexing="ij")

    def in_frame(x: np.ndarray, y: np.ndarray, z: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Distance from the cylinder's axis and position along it."""
        sideways = x * across + y * along
        return np.hypot(sideways * upright - z * lean, y * across - x * along), sideways * lean + z * upright

    # Deep inside the value is 1 and far outside 0; only what lies near a surface needs the sum.
    off_axis, height = in_frame(x, y, z)
    reach = _REACH_SIGMAS * hypot(sigma, extra)
    wall, end = off_axis - radius_mm, np.abs(height) - length_mm / 2
    image = ((wall < 0) & (end < 0)).astype(np.float64)
    near = (np.maximum(wall, end) > -reach) & (np.maximum(wall, end) < reach)
    x, y, z = x[near], y[near], z[near]
    total = np.zeros(x.shape)
    for weight, (dx, dy, dz) in _shifts(extra, axial=axial_mm > in_plane_mm):
        off_axis, height = in_frame(x + dx, y + dy, z + dz)
        ends = ndtr((height + length_mm / 2) / sigma) - ndtr((height - length_mm / 2) / sigma)
        total += weight * np.interp(off_axis, distance, value) * ends
    image[near] = total
    return image


def _shifts(extra_sigma_mm: float, *, axial: bool) -> list[tuple[float, tuple[float, float, float]]]:
    """Weights and shifts (mm) whose sum stands for a Gaussian along z, or for a round one across it."""
    nodes, weights = np.polynomial.hermite_e.hermegauss(7 if axial else 5)
    line = [(float(weight), float(node) * extra_sigma_mm) for node, weight in zip(nodes, weights, strict=True)]
    total = sum(weight for weight, _ in line)
    if axial:
        return [(weight / total, (0.0, 0.0, shift)) for weight, shift in line]
    return [(wx * wy / total**2, (dx, dy, 0.0)) for (wx, dx), (wy, dy) in product(line, line)]


def point_source_image(
    *,
    sample_axes_mm: tuple[np.ndarray, np.ndarray, np.ndarray],
    centres_mm: tuple[tuple[float, float, float], ...],
    diameter_mm: float,
    in_plane_mm: float,
    axial_mm: float,
) -> np.ndarray:
    """Small spheres, blurred and sampled; each would peak at 1 if it were a point.

    A sphere of diameter d has the variance d² / 20 along each axis. For a diameter far below the width the blurred
    sphere is the Gaussian with that variance added, to much better than 0.001 mm of width.

    Parameters
    ----------
    sample_axes_mm
        Sample positions along x, y, z, mm.
    centres_mm
        Centres of the sources, mm.
    diameter_mm
        Their diameter, mm.
    in_plane_mm, axial_mm
        Widths (FWHM) of the blur across and along z, mm.

    Returns
    -------
    numpy.ndarray
        Samples, float64, shape (nx, ny, nz).

    >>> at = (np.array([0.0, 3.0]), np.zeros(1), np.zeros(1))
    >>> point_source_image(sample_axes_mm=at, centres_mm=((0.0, 0.0, 0.0),), diameter_mm=0.0, in_plane_mm=6.0,
    ...                    axial_mm=6.0).round(3).ravel().tolist()
    [1.0, 0.5]
    """
    own_mm = fwhm_from_sigma(diameter_mm / sqrt(20.0))
    sigmas = [sigma_from_fwhm(sqrt(fwhm**2 + own_mm**2)) for fwhm in (in_plane_mm, in_plane_mm, axial_mm)]
    height = np.prod([sigma_from_fwhm(f) for f in (in_plane_mm, in_plane_mm, axial_mm)]) / np.prod(sigmas)
    image = np.zeros(tuple(len(axis) for axis in sample_axes_mm))
    for centre in centres_mm:
        x, y, z = (
            np.exp(-0.5 * ((axis - c) / sigma) ** 2)
            for axis, c, sigma in zip(sample_axes_mm, centre, sigmas, strict=True)
        )
        image += height * x[:, None, None] * y[None, :, None] * z[None, None, :]
    return image
