"""Exact Gaussian blur of a piecewise constant object, point-sampled at any positions.

This is the project's meaning of a width: a continuous object convolved with a Gaussian and sampled at voxel centres.
"""

from math import sqrt

import numpy as np
from scipy.special import erf

from evenblur.widths import sigma_from_fwhm


def blur_weights(centres_mm: np.ndarray, cells_mm: np.ndarray, *, fwhm_mm: float) -> np.ndarray:
    """Share of each cell in the blurred value at each sample position, along one axis.

    The integral of a Gaussian over a cell is a difference of two error functions: nothing is interpolated.

    Parameters
    ----------
    centres_mm
        Sample positions, mm, shape (n,).
    cells_mm
        Centres of the object's equal cells, mm, increasing, shape (m,) with m > 1.
    fwhm_mm
        Width of the Gaussian, mm.

    Returns
    -------
    numpy.ndarray
        Weights, float64, shape (n, m). A row sums to 1 where the cells reach far enough on both sides.

    >>> weights = blur_weights(np.array([0.0]), np.arange(-20.0, 21.0), fwhm_mm=6.0)
    >>> round(float(weights.sum()), 6)
    1.0
    """
    half = (cells_mm[1] - cells_mm[0]) / 2
    distance = (cells_mm[None, :] - centres_mm[:, None]) / (sqrt(2) * sigma_from_fwhm(fwhm_mm))
    step = half / (sqrt(2) * sigma_from_fwhm(fwhm_mm))
    return 0.5 * (erf(distance + step) - erf(distance - step))


def sample_blurred(
    cells: np.ndarray,
    *,
    cell_axes_mm: tuple[np.ndarray, np.ndarray, np.ndarray],
    sample_axes_mm: tuple[np.ndarray, np.ndarray, np.ndarray],
    in_plane_mm: float,
    axial_mm: float,
) -> np.ndarray:
    """Blur an object of constant cells and sample it on another grid with the same axes (x, y, z; z axial).

    Parameters
    ----------
    cells
        Activity of each cell, shape (mx, my, mz).
    cell_axes_mm, sample_axes_mm
        Positions of cell centres and of samples along x, y, z, mm.
    in_plane_mm, axial_mm
        Widths (FWHM) of the Gaussian, mm.

    Returns
    -------
    numpy.ndarray
        Samples, float64, shape (nx, ny, nz).

    >>> axis = np.arange(-30.0, 31.0)
    >>> flat = sample_blurred(np.ones((61, 61, 61)), cell_axes_mm=(axis,) * 3, sample_axes_mm=(np.zeros(1),) * 3,
    ...                       in_plane_mm=5.0, axial_mm=6.0)
    >>> round(float(flat[0, 0, 0]), 6)
    1.0
    """
    blurred = np.asarray(cells, dtype=np.float64)
    for cell_axis, sample_axis, fwhm_mm in zip(
        cell_axes_mm, sample_axes_mm, (in_plane_mm, in_plane_mm, axial_mm), strict=True
    ):
        # The first axis is summed away and comes back last, so three turns restore the order.
        blurred = np.tensordot(blurred, blur_weights(sample_axis, cell_axis, fwhm_mm=fwhm_mm), axes=(0, 1))
    return blurred
