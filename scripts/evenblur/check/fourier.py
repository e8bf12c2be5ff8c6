"""Smooth by the textbook: mirror the image at its faces, multiply its waves, take the middle."""

import numpy as np

SIGMA_OF_FWHM = 1.0 / (2.0 * np.sqrt(2.0 * np.log(2.0)))


def smooth(volume: np.ndarray, sigma_voxels: tuple[float, float, float]) -> np.ndarray:
    """A volume after a Gaussian: each wave of angular frequency w is multiplied by exp(-(sigma w)^2 / 2).

    Beyond its faces the volume goes on as its mirror image. Voxels that are NaN stay so and count for nothing.

    Parameters
    ----------
    volume
        3-D, float64.
    sigma_voxels
        Standard deviation along each axis, voxels.

    >>> smooth(np.ones((4, 5, 6)), (1.0, 2.0, 0.0)).round(12).max().item()
    1.0
    """
    missing = np.isnan(volume)
    if missing.all():
        return volume
    if not missing.any():
        return _axes(volume, sigma_voxels)
    spread = _axes(np.where(missing, 0.0, volume), sigma_voxels)
    weight = _axes(np.where(missing, 0.0, 1.0), sigma_voxels)
    return np.divide(spread, weight, out=np.full_like(volume, np.nan), where=~missing)


def _axes(volume: np.ndarray, sigma_voxels: tuple[float, float, float]) -> np.ndarray:
    for axis, sigma in enumerate(sigma_voxels):
        if sigma > 0:
            length = volume.shape[axis]
            mirrored = np.concatenate([volume, np.flip(volume, axis)], axis=axis)
            omega = 2 * np.pi * np.fft.rfftfreq(2 * length)
            factors = np.exp(-((sigma * omega) ** 2) / 2).reshape([-1 if i == axis else 1 for i in range(3)])
            whole = np.fft.irfft(np.fft.rfft(mirrored, axis=axis) * factors, n=2 * length, axis=axis)
            volume = np.take(whole, np.arange(length), axis=axis)
    return volume
