"""A small invented tomograph for the tests: parallel projections of a slice, a detector's blur, counts, two ways back.

The object is drawn on pixels a third as large as the image's, so that its edges are no stairs of the image's grid. The
projector is a sparse matrix of its own: each pixel's square falls on the detector as a trapezoid, whose shares in the
bins are exact integrals. Lengths are in mm; the middle of the field is at (0, 0).
"""

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage, sparse

FWHM_PER_SIGMA = 2.0 * np.sqrt(2.0 * np.log(2.0))
FINER = 3
"""Pixels of the drawn object across one of the image's."""


@lru_cache(maxsize=4)
def projector(pixels: int, pixel_mm: float, *, angles: int, bins: int, bin_mm: float) -> sparse.csr_matrix:
    """Matrix (angles * bins, pixels * pixels): length (mm) of each bin's strip within each pixel, by the strip's width.

    Angles are spread evenly over 180 degrees.
    """
    axis = (np.arange(pixels) - (pixels - 1) / 2) * pixel_mm
    x, y = (grid.ravel() for grid in np.meshgrid(axis, axis, indexing="ij"))
    rows, columns, shares = [], [], []
    for a in range(angles):
        angle = np.pi * (a + 0.25) / angles
        c, s = abs(np.cos(angle)) * pixel_mm, abs(np.sin(angle)) * pixel_mm
        centre = x * np.cos(angle) + y * np.sin(angle)
        lowest = np.floor((centre - (c + s) / 2) / bin_mm + bins / 2).astype(int)
        reach = int(np.ceil((c + s) / bin_mm)) + 1
        for b in range(reach):
            bin_index = lowest + b
            edge = (bin_index - bins / 2) * bin_mm
            share = _trapezoid(edge + bin_mm - centre, c, s) - _trapezoid(edge - centre, c, s)
            good = (share > 1e-9) & (bin_index >= 0) & (bin_index < bins)
            rows.append(a * bins + bin_index[good])
            columns.append(np.flatnonzero(good))
            shares.append(share[good] * pixel_mm**2 / bin_mm)
    return sparse.csr_matrix(
        (np.concatenate(shares), (np.concatenate(rows), np.concatenate(columns))),
        shape=(angles * bins, pixels * pixels),
    )


def _trapezoid(t: NDArray[np.float64], c: float, s: float) -> NDArray[np.float64]:
    """Share of a unit of activity below t, of a box of width c convolved with a box of width s, about 0."""
    wide, narrow = max(c, s), min(c, s)
    if narrow < 1e-9 * wide:
        return np.clip(t / wide + 0.5, 0.0, 1.0)

    def ramp(v: NDArray[np.float64]) -> NDArray[np.float64]:
        return 0.5 * np.maximum(v, 0.0) ** 2

    outer, inner = (wide + narrow) / 2, (wide - narrow) / 2
    return (ramp(t + outer) - ramp(t + inner) - ramp(t - inner) + ramp(t - outer)) / (wide * narrow)


@dataclass(frozen=True)
class Tomograph:
    """One ring: image grid, projections, and the blur (FWHM, mm) that the detector adds to every projection."""

    pixels: int = 72
    pixel_mm: float = 2.0
    angles: int = 72
    bin_mm: float = 1.5
    detector_mm: float = 5.0

    @property
    def bins(self) -> int:
        """Bins that cover the image's diagonal."""
        return int(np.ceil(np.sqrt(2.0) * self.pixels * self.pixel_mm / self.bin_mm)) + 1

    def matrix(self) -> sparse.csr_matrix:
        """Projector of the image's own pixels, without the detector's blur: what the reconstruction knows."""
        return projector(self.pixels, self.pixel_mm, angles=self.angles, bins=self.bins, bin_mm=self.bin_mm)

    def grid(self) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Positions x and y (mm) of the drawn object's pixels, FINER across one of the image's."""
        count = self.pixels * FINER
        axis = (np.arange(count) - (count - 1) / 2) * self.pixel_mm / FINER
        return np.meshgrid(axis, axis, indexing="ij")

    def project(self, drawn: NDArray[np.float64]) -> NDArray[np.float64]:
        """Noise-free, blurred projections (angles, bins) of an object drawn on `grid` (activity a mm²)."""
        finer = projector(
            self.pixels * FINER, self.pixel_mm / FINER, angles=self.angles, bins=self.bins, bin_mm=self.bin_mm
        )
        sharp = (finer @ drawn.ravel()).reshape(self.angles, self.bins)
        sigma = self.detector_mm / FWHM_PER_SIGMA / self.bin_mm
        return ndimage.gaussian_filter1d(sharp, sigma, axis=1, mode="constant", truncate=6.0)

    def filtered_back_projection(self, sinograms: NDArray[np.float64]) -> NDArray[np.float64]:
        """Images (n, pixels, pixels) of sinograms (n, angles, bins): ramp filter, no window, linear interpolation."""
        bins = sinograms.shape[-1]
        length = 2 ** int(np.ceil(np.log2(2 * bins)))
        lag = np.arange(length)
        lag = np.minimum(lag, length - lag)
        # The band-limited ramp in real space (Ramachandran and Lakshminarayanan 1971) keeps the mean right.
        kernel = np.where(lag == 0, 0.25, np.where(lag % 2 == 1, -1.0 / (np.pi * np.maximum(lag, 1)) ** 2, 0.0))
        ramp = np.fft.rfft(kernel).real / self.bin_mm
        filtered = np.fft.irfft(np.fft.rfft(sinograms, length, axis=-1) * ramp, length, axis=-1)[..., :bins]
        axis = (np.arange(self.pixels) - (self.pixels - 1) / 2) * self.pixel_mm
        image = np.zeros((sinograms.shape[0], self.pixels, self.pixels))
        for a in range(self.angles):
            angle = np.pi * (a + 0.25) / self.angles
            place = (axis[:, None] * np.cos(angle) + axis * np.sin(angle)) / self.bin_mm + bins / 2 - 0.5
            low = np.floor(place).astype(int)
            part = place - low
            image += filtered[:, a, low] * (1.0 - part) + filtered[:, a, low + 1] * part
        return image * np.pi / self.angles

    def expectation_maximisation(
        self, sinograms: NDArray[np.float64], *, stops: list[int], subsets: int = 1
    ) -> dict[int, NDArray[np.float64]]:
        """Images (n, pixels, pixels) after each number of iterations: MLEM, or ordered subsets; no blur is modelled."""
        whole = self.matrix()
        parts = []
        for first in range(subsets):
            rows = np.concatenate(
                [np.arange(a * self.bins, (a + 1) * self.bins) for a in range(first, self.angles, subsets)]
            )
            part = whole[rows]
            parts.append((part, part.T.tocsr(), np.asarray(part.sum(axis=0)).ravel()[:, None], rows))
        counts = sinograms.reshape(sinograms.shape[0], -1).T
        image = np.full((whole.shape[1], counts.shape[1]), counts.mean() / max(whole.sum(axis=1).mean(), 1e-12))
        found = {}
        for iteration in range(1, max(stops) + 1):
            for part, back, sensitivity, rows in parts:
                expected = part @ image
                ratio = np.where(expected > 1e-12, counts[rows] / np.maximum(expected, 1e-12), 0.0)
                image *= (back @ ratio) / np.maximum(sensitivity, 1e-12)
            if iteration in stops:
                found[iteration] = image.T.reshape(-1, self.pixels, self.pixels).copy()
        return found


def disc(tomograph: Tomograph, *, radius_mm: float, centre_mm: tuple[float, float] = (0.0, 0.0)) -> NDArray[np.float64]:
    """Disc of activity 1 on the drawn object's grid; a pixel on the edge gets about its share."""
    x, y = tomograph.grid()
    step = tomograph.pixel_mm / FINER
    return np.clip((radius_mm - np.hypot(x - centre_mm[0], y - centre_mm[1])) / step + 0.5, 0.0, 1.0)


def noisy_slices(
    clean: NDArray[np.float64], *, slices: int, counts: float, rng: np.random.Generator
) -> NDArray[np.float64]:
    """Poisson sinograms (slices, angles, bins) of one object, `counts` in each slice, scaled back to the clean sum."""
    scale = counts / clean.sum()
    return rng.poisson(np.broadcast_to(clean * scale, (slices, *clean.shape))) / scale


def stacked(images: NDArray[np.float64], *, axial_mm: float, slice_mm: float) -> NDArray[np.float64]:
    """Volume (x, y, z) of the slices, blurred along z by a Gaussian of FWHM `axial_mm`."""
    volume = np.moveaxis(images, 0, -1)
    sigma = axial_mm / FWHM_PER_SIGMA / slice_mm
    return np.ascontiguousarray(ndimage.gaussian_filter1d(volume, sigma, axis=-1, mode="reflect", truncate=6.0))
