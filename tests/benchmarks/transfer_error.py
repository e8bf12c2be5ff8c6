"""Errors of the transfer function for widths from 0.3 to 20 voxels, with scipy.ndimage and SimpleITK beside it.

python tests/benchmarks/transfer_error.py [--length 192]

Every cosine wave of the axis goes through each smoother; the table gives the largest difference from
exp(-sigma^2 omega^2 / 2) below 0.9 of the Nyquist frequency and up to it.
"""

import argparse
import sys
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parents[2] / "scripts"))

from evenblur import command  # noqa: I001  (sets one thread before numpy is imported)

import numpy as np
import SimpleITK
from scipy.ndimage import gaussian_filter1d

from evenblur.smoothing import smooth_volume
from evenblur.widths import FWHM_PER_SIGMA

WIDTHS = (0.3, 0.5, 0.7, 1.0, 1.5, 2.0, 2.5, 3.0, 4.0, 6.0, 10.0, 20.0)


def main() -> None:
    """Print the table."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--length", type=int, default=192)
    length = parser.parse_args().length
    number = np.arange(length)
    omega = np.pi * number / length
    waves = np.cos(np.outer(omega, number + 0.5)).astype(np.float32)  # one wave a row
    weight = (waves.astype(float) ** 2).sum(axis=1)
    print(f"axis of {length} voxels; largest error below 0.9 Nyquist | up to Nyquist")
    print(
        "width_voxels      evenblur: image      evenblur: fourier        scipy (truncate 6)       simpleitk recursive"
    )
    for width in WIDTHS:
        sigma = width / FWHM_PER_SIGMA
        wanted = np.exp(-0.5 * (sigma * omega) ** 2)
        cells = []
        for smoother in (image_route, fourier_route, scipy_filter, recursive_filter):
            seen = (smoother(waves, sigma) * waves).sum(axis=1, dtype=float) / weight
            error = np.abs(seen - wanted)
            cells.append(f"{error[omega < 0.9 * np.pi].max():10.1e} | {error.max():8.1e}")
        print(f"{width:12g}  " + "   ".join(cells), flush=True)


def image_route(waves: np.ndarray, sigma: float) -> np.ndarray:
    """Smooth rows by matrix products."""
    return _ours(waves, sigma, "image")


def fourier_route(waves: np.ndarray, sigma: float) -> np.ndarray:
    """Smooth rows by the cosine transform."""
    return _ours(waves, sigma, "fourier")


def _ours(waves: np.ndarray, sigma: float, route: str) -> np.ndarray:
    widths = (0.0, sigma * FWHM_PER_SIGMA, 0.0)
    return smooth_volume(waves[:, :, None], voxel_mm=(1.0, 1.0, 1.0), fwhm_mm=widths, route=route)[:, :, 0]


def scipy_filter(waves: np.ndarray, sigma: float) -> np.ndarray:
    """Smooth rows by the sampled Gaussian."""
    return gaussian_filter1d(waves, sigma, axis=1, mode="reflect", truncate=6.0)


def recursive_filter(waves: np.ndarray, sigma: float) -> np.ndarray:
    """Smooth rows by the recursive approximation; its ends repeat the end voxel, so rows are mirrored on first."""
    length = waves.shape[1]
    mirrored = np.concatenate([waves[:, ::-1], waves, waves[:, ::-1]], axis=1)
    image = SimpleITK.GetImageFromArray(mirrored)
    return SimpleITK.GetArrayFromImage(SimpleITK.RecursiveGaussian(image, sigma, False, 0, 0))[:, length : 2 * length]


assert command  # imported for what it sets

if __name__ == "__main__":
    main()
