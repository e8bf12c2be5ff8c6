"""Noise as a reconstruction leaves it: correlated over a few millimetres and stronger where there is more activity."""

import numpy as np

from evenblur.widths import sigma_from_fwhm

_KNEE = 0.15
"""Share of full activity below which iterative reconstructions get quiet."""
_AIR = 0.02
"""Variance that filtered back-projection leaves in the air, as a share of that at full activity."""


def correlated_noise(
    generator: np.random.Generator,
    shape: tuple[int, int, int],
    *,
    voxel_mm: tuple[float, float, float],
    fwhm_mm: float,
) -> np.ndarray:
    """White noise filtered with a Gaussian of the given width, with mean 0 and standard deviation 1 in expectation.

    The filter is periodic and its transfer function is exp(-sigma² omega² / 2) up to the Nyquist frequency. The
    variance that it leaves is the mean of its square over all frequencies, so the scale is known without measuring.

    Parameters
    ----------
    generator
        Source of randomness.
    shape
        Voxels along the axes.
    voxel_mm
        Voxel size along the axes, mm.
    fwhm_mm
        Width (FWHM) of the filter, mm.

    Returns
    -------
    numpy.ndarray
        Noise, float64, of the given shape.

    >>> correlated_noise(np.random.default_rng(1), (8, 8, 8), voxel_mm=(3.0, 3.0, 3.0), fwhm_mm=5.0).shape
    (8, 8, 8)
    """
    sigma = sigma_from_fwhm(fwhm_mm)
    transfer = np.ones(())
    variance = 1.0
    for axis, (count, size) in enumerate(zip(shape, voxel_mm, strict=True)):
        response = np.exp(-0.5 * (sigma * 2 * np.pi * np.fft.fftfreq(count, d=size)) ** 2)
        variance *= float(np.mean(response**2))
        kept = response[: count // 2 + 1] if axis == 2 else response
        transfer = transfer[..., None] * kept
    spectrum = np.fft.rfftn(generator.standard_normal(shape))
    return np.fft.irfftn(spectrum * transfer, s=shape, axes=(0, 1, 2)) / np.sqrt(variance)


def add_noise(
    clean: np.ndarray,
    generator: np.random.Generator,
    *,
    voxel_mm: tuple[float, float, float],
    fwhm_mm: float,
    share: float,
    full: float,
    positive: bool,
) -> np.ndarray:
    """Add correlated noise that rises with the local activity.

    Where there is much activity, the variance is in proportion to it. Towards the air an iterative reconstruction,
    which cannot go below zero, gets quiet: its deviation falls like the activity itself. Filtered back-projection
    leaves noise in the air as well, and so negative values.

    Parameters
    ----------
    clean
        Noise-free image, shape (nx, ny, nz).
    generator
        Source of randomness.
    voxel_mm
        Voxel size along the axes, mm.
    fwhm_mm
        Width (FWHM) of the noise's correlation, mm.
    share
        Standard deviation where the activity is `full`, as a share of it.
    full
        The activity that `share` refers to, in the image's unit.
    positive
        True for an iterative reconstruction, False for filtered back-projection.

    Returns
    -------
    numpy.ndarray
        Noisy image, float64.

    >>> quiet = add_noise(np.zeros((4, 4, 4)), np.random.default_rng(1), voxel_mm=(3.0, 3.0, 3.0), fwhm_mm=5.0,
    ...                   share=0.1, full=1.0, positive=True)
    >>> float(abs(quiet).max())
    0.0
    """
    noise = correlated_noise(generator, clean.shape, voxel_mm=voxel_mm, fwhm_mm=fwhm_mm)
    level = np.clip(clean, 0.0, None) / full
    # Both forms are 1 at full activity.
    deviation = level * np.sqrt((1 + _KNEE) / (level + _KNEE)) if positive else np.sqrt((level + _AIR) / (1 + _AIR))
    return clean + share * full * deviation * noise
