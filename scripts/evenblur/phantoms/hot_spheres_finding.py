"""Finding hot spheres without being told where: blobs first, then which blob is which of the listed spheres.

Blobs are the maxima of the difference of two Gaussians at the scales of the listed diameters (a blob detector that
answers to bright compact spots). One of the strongest blobs is taken as one of the listed spheres: its radial profile
then tells blur and hot level. With these every blob is compared with every listed sphere and with a plain background,
and the assignment with the least sum of squares is that choice's explanation of the image. All choices are tried and
the best explanation wins; the largest listed sphere goes first and is preferred unless another explains the image
clearly better. The edge of a warm body or a cold insert, which is brighter than its surroundings on one side only, has
neither the brightness nor the profile of a sphere of the known level.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from math import pi, sqrt

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage
from scipy.optimize import linear_sum_assignment
from scipy.special import erf

from evenblur.phantoms.base import MeasurementError
from evenblur.widths import FWHM_PER_SIGMA

Array = NDArray[np.float64]

_COARSE_MM = 2.5  # finding needs no finer voxels
_REACH_MM = 8.0  # profiles reach this far beyond the largest sphere's wall
_MOST_BLOBS = 24
_LEFT_OVER = 0.15  # share of a sphere's own sum of squares that may stay unexplained, beside the noise
_NOISE_SHELLS = 15.0  # a profile has about so many independent shells
_REFERENCES = 3
_RIM = 1.4
_LEAST_CENTRE = 0.25  # a sphere whose centre recovers less than this share is too small for the resolution
_DIMMEST, _BRIGHTEST = 0.6, 1.6  # allowed brightness of a blob over that of the sphere that it is taken for
_NOISE_FWHM_MM = 6.0  # reconstructed noise is about this smooth; it says how many voxels speak as one
_SIGNIFICANT = 4.0  # a sphere must stand out of the noise by this many standard deviations
_PREFERENCE = 0.9  # another size of the brightest blob must explain the image this much better than the largest


@dataclass(frozen=True)
class Blob:
    """A bright spot: its centre (mm), the strength of the detector's answer, and the radius that it answers to (mm)."""

    centre_mm: tuple[float, float, float]
    strength: float
    radius_mm: float


@dataclass(frozen=True)
class Found:
    """Spheres found: (number in the list, centre in mm), and starting values for the fit."""

    spheres: tuple[tuple[int, tuple[float, float, float]], ...]
    sigma_mm: float
    hot: float
    background: float
    blobs: int


def find_spheres(
    volume: Array, *, voxel_mm: tuple[float, float, float], diameters_mm: Sequence[float], wall_mm: float
) -> Found:
    """Find which of the listed spheres the image shows, and where.

    Parameters
    ----------
    volume
        Image, shape (x, y, z), finite.
    voxel_mm
        Voxel size, mm.
    diameters_mm
        Inner diameters of the spheres that may be there, mm.
    wall_mm
        Thickness of their cold walls, mm.

    Returns
    -------
    Found
        Centres to a fraction of a voxel, in mm from the centre of the first voxel.

    Raises
    ------
    MeasurementError
        If no bright spot stands out, or none fits a listed sphere.
    """
    coarse, step, offset = _coarse(volume, voxel_mm)
    blobs = find_blobs(coarse, voxel_mm=step, diameters_mm=diameters_mm)
    if not blobs:
        raise MeasurementError("nothing in the image stands out as hotter than its surroundings")
    reach = max(diameters_mm) / 2.0 + wall_mm + max(_REACH_MM, 2.0 * max(step))
    profiles = [_profile(coarse, voxel_mm=step, blobs=blobs, k=k, reach_mm=reach) for k in range(len(blobs))]
    search = _Search(profiles, tuple(diameters_mm), wall_mm, step)
    order = sorted(range(len(blobs)), key=lambda k: -blobs[k].strength * blobs[k].radius_mm ** 1.5)
    best: _Explanation | None = None
    for reference in order[:_REFERENCES]:
        for diameter in sorted(set(diameters_mm), reverse=True):
            other = search.explanation(reference, diameter)
            if other is not None and other.pairs and (best is None or other.squares < _PREFERENCE * best.squares):
                best = other
    if best is None:
        raise MeasurementError("no bright spot in the image has the shape of one of the listed spheres")
    spheres = tuple(
        (d, (blobs[k].centre_mm[0] + offset[0], blobs[k].centre_mm[1] + offset[1], blobs[k].centre_mm[2] + offset[2]))
        for d, k in best.pairs
    )
    return Found(spheres, best.fit.sigma_mm, best.fit.hot, best.fit.background, len(blobs))


def _coarse(
    volume: Array, voxel_mm: tuple[float, float, float]
) -> tuple[Array, tuple[float, float, float], tuple[float, float, float]]:
    """Means over blocks of fine voxels, their size, and where the first block's centre lies."""
    factor = [
        max(1, min(round(_COARSE_MM / step), count // 8)) for step, count in zip(voxel_mm, volume.shape, strict=True)
    ]
    a, b, c = factor
    nx, ny, nz = (count // f for count, f in zip(volume.shape, factor, strict=True))
    coarse = volume[: nx * a, : ny * b, : nz * c].reshape(nx, a, ny, b, nz, c).mean(axis=(1, 3, 5))
    x, y, z = voxel_mm
    return coarse, (x * a, y * b, z * c), (x * (a - 1) / 2, y * (b - 1) / 2, z * (c - 1) / 2)


def find_blobs(volume: Array, *, voxel_mm: tuple[float, float, float], diameters_mm: Sequence[float]) -> list[Blob]:
    """Bright compact spots, strongest first: maxima of differences of Gaussians at the listed diameters' scales.

    >>> image = np.zeros((20, 20, 20))
    >>> image[9:12, 9:12, 9:12] = 1.0
    >>> blobs = find_blobs(image, voxel_mm=(3.0, 3.0, 3.0), diameters_mm=[10.0])
    >>> [round(c, 6) for c in blobs[0].centre_mm]
    [30.0, 30.0, 30.0]
    """
    step = np.array(voxel_mm)
    found: list[Blob] = []
    for diameter in sorted(set(diameters_mm)):
        # The answer to a ball is largest at about R / sqrt(3); half of it lets blur be part of the blob.
        scale = 0.5 * diameter / 2.0
        narrow = ndimage.gaussian_filter(volume, scale / step, mode="nearest", truncate=3.0)
        wide = ndimage.gaussian_filter(volume, 2.0 * scale / step, mode="nearest", truncate=3.0)
        answer = narrow - wide
        noise = 1.4826 * float(np.median(np.abs(answer - np.median(answer))))
        peaks = np.argwhere((answer == ndimage.maximum_filter(answer, size=3)) & (answer > max(4.0 * noise, 0.0)))
        strengths = answer[tuple(peaks.T)]
        for peak in peaks[np.argsort(strengths)[::-1][: 3 * _MOST_BLOBS]]:
            centre = (peak + _vertex(answer, peak)) * step
            place = (float(centre[0]), float(centre[1]), float(centre[2]))
            found.append(Blob(place, float(answer[tuple(peak)]), diameter / 2.0))
    found.sort(key=lambda blob: -blob.strength)
    kept: list[Blob] = []
    for blob in found:
        apart = [np.linalg.norm(np.subtract(blob.centre_mm, k.centre_mm)) for k in kept]
        # A large sphere's rim is bright at small scales: it is no blob of its own.
        if all(d > max(_RIM * k.radius_mm, 0.7 * blob.radius_mm) for d, k in zip(apart, kept, strict=True)):
            kept.append(blob)
    return kept[:_MOST_BLOBS]


def _vertex(answer: Array, peak: NDArray[np.intp]) -> Array:
    """Where a parabola through a maximum and its two neighbours peaks, per axis, in voxels from the maximum."""
    shift = np.zeros(3)
    for axis in range(3):
        if 0 < peak[axis] < answer.shape[axis] - 1:
            at = list(peak)
            at[axis] -= 1
            low = answer[tuple(at)]
            at[axis] += 2
            high, middle = answer[tuple(at)], answer[tuple(peak)]
            curvature = low - 2.0 * middle + high
            if curvature < 0:
                shift[axis] = np.clip(0.5 * (low - high) / curvature, -0.5, 0.5)
    return shift


@dataclass(frozen=True)
class _RadialProfile:
    """Means over shells about a blob: radius (mm), mean, voxels, and the variance of the voxels within their shells."""

    radius_mm: Array
    mean: Array
    count: Array
    variance: float

    def squares(self, model: Array) -> float:
        return float(np.sum(self.count * (self.mean - model) ** 2))

    def without_sphere(self) -> float:
        """Sum of squares about the best constant."""
        return self.squares(np.full_like(self.mean, np.average(self.mean, weights=self.count)))


@dataclass(frozen=True)
class _RoundFit:
    """A sphere of known size fitted to a radial profile: one sigma for all directions, hot level, background."""

    sigma_mm: float
    hot: float
    background: float
    squares: float


@dataclass(frozen=True)
class _Explanation:
    """Which blob is which sphere: pairs (number in the list, blob), and the sum of squares left over all blobs."""

    pairs: tuple[tuple[int, int], ...]
    squares: float
    fit: _RoundFit


def _round_ball(radius_mm: Array, sphere_mm: float, sigma_mm: float) -> Array:
    """A ball blurred alike in all directions, at distances from its centre (closed form)."""
    r = np.maximum(radius_mm, 1e-3 * sigma_mm)
    near, far = (sphere_mm - r) / (sqrt(2.0) * sigma_mm), (sphere_mm + r) / (sqrt(2.0) * sigma_mm)
    value: Array = 0.5 * (erf(near) + erf(far)) - sigma_mm / (r * sqrt(2.0 * pi)) * (
        np.exp(-(near**2)) - np.exp(-(far**2))
    )
    return value


@dataclass(frozen=True)
class _Search:
    """Radial profiles of the blobs, and how the listed spheres explain them."""

    profiles: list[_RadialProfile]
    diameters_mm: tuple[float, ...]
    wall_mm: float
    voxel_mm: tuple[float, float, float]

    def round_fit(self, blob: int, diameter_mm: float) -> _RoundFit | None:
        """The blob as a sphere of known size; None where that makes it no hotter than its surroundings."""
        profile = self.profiles[blob]
        best: _RoundFit | None = None
        for sigma in np.geomspace(0.3 * min(self.voxel_mm), 0.5 * diameter_mm, 60):
            inner = _round_ball(profile.radius_mm, diameter_mm / 2.0, sigma)
            outer = _round_ball(profile.radius_mm, diameter_mm / 2.0 + self.wall_mm, sigma)
            columns = np.column_stack([inner, 1.0 - outer])
            root = np.sqrt(profile.count)
            (hot, background), *_ = np.linalg.lstsq(columns * root[:, None], profile.mean * root, rcond=None)
            squares = profile.squares(columns @ np.array([hot, background]))
            if hot > background and hot > 0 and (best is None or squares < best.squares):
                best = _RoundFit(float(sigma), float(hot), float(background), squares)
        return best

    def explanation(self, reference: int, diameter_mm: float) -> _Explanation | None:
        """The best assignment of blobs to spheres if the reference blob is a sphere of this diameter."""
        fit = self.round_fit(reference, diameter_mm)
        if fit is None:
            return None
        speaking = np.prod([max(1.0, _NOISE_FWHM_MM / FWHM_PER_SIGMA * 2.0 * sqrt(pi) / s) for s in self.voxel_mm])
        noise = self.profiles[reference].variance * float(speaking)
        plain = [profile.without_sphere() for profile in self.profiles]
        gains = np.array(
            [
                [self._gain(k, plain[k], diameter, fit, noise) for diameter in self.diameters_mm]
                for k in range(len(self.profiles))
            ]
        )
        # As many empty columns as blobs: a blob may be none of the spheres.
        costs = np.hstack([-gains, np.zeros((len(self.profiles), len(self.profiles)))])
        pairs = tuple(
            sorted((int(d), int(k)) for k, d in zip(*linear_sum_assignment(costs), strict=True) if costs[k, d] < 0)
        )
        return _Explanation(pairs, sum(plain) - float(sum(gains[k, d] for d, k in pairs)), fit)

    def _gain(self, blob: int, plain: float, diameter_mm: float, fit: _RoundFit, noise: float) -> float:
        """How much a sphere of the known level and blur lowers the sum of squares below a constant's.

        Zero where the sphere is too small for the blur, would not stand out of the noise, is not as bright as the
        level says, or leaves too much of the profile unexplained.
        """
        profile = self.profiles[blob]
        inner = _round_ball(profile.radius_mm, diameter_mm / 2.0, fit.sigma_mm)
        if _round_ball(np.zeros(1), diameter_mm / 2.0, fit.sigma_mm)[0] < _LEAST_CENTRE:
            return 0.0
        around = 1.0 - _round_ball(profile.radius_mm, diameter_mm / 2.0 + self.wall_mm, fit.sigma_mm)
        power = float(np.sum(profile.count * around**2))

        def off_background(values: Array) -> Array:
            rest: Array = values - around * float(np.sum(profile.count * around * values)) / power
            return rest

        template, data = off_background(inner), off_background(profile.mean)
        signal = float(np.sum(profile.count * template**2))
        share = float(np.sum(profile.count * template * data)) / (fit.hot * signal)
        contrast = fit.hot - max(fit.background, 0.0)
        if contrast**2 * signal < _SIGNIFICANT**2 * noise or not _DIMMEST < share < _BRIGHTEST:
            return 0.0
        left = float(np.sum(profile.count * (data - fit.hot * template) ** 2))
        if left > _LEFT_OVER * fit.hot**2 * signal + _NOISE_SHELLS * noise:
            return 0.0
        return max(plain - left, 0.0)


def _profile(
    volume: Array, *, voxel_mm: tuple[float, float, float], blobs: list[Blob], k: int, reach_mm: float
) -> _RadialProfile:
    """Radial profile of a blob from the voxels that are nearer to it than to any other strong blob."""
    blob = blobs[k]
    step = np.array(voxel_mm)
    centre = np.array(blob.centre_mm)
    low = np.maximum(np.ceil((centre - reach_mm) / step).astype(int), 0)
    high = np.minimum(np.floor((centre + reach_mm) / step).astype(int) + 1, volume.shape)
    axes = [np.arange(a, b) * s for a, b, s in zip(low, high, step, strict=True)]

    def squared_distance(point: tuple[float, float, float]) -> Array:
        x, y, z = (axis - c for axis, c in zip(axes, point, strict=True))
        distance: Array = x[:, None, None] ** 2 + y[:, None] ** 2 + z**2
        return distance

    own = squared_distance(blob.centre_mm)
    inside = own <= reach_mm**2
    for j, other in enumerate(blobs):
        if j != k and other.strength > 0.3 * blob.strength:
            inside &= own <= squared_distance(other.centre_mm)
    radius = np.sqrt(own[inside])
    data = volume[tuple(slice(a, b) for a, b in zip(low, high, strict=True))][inside]
    shell = np.minimum((radius / (0.5 * min(voxel_mm))).astype(int), int(reach_mm / (0.5 * min(voxel_mm))))
    count = np.bincount(shell)
    used = count > 0
    count = count[used]
    mean = np.bincount(shell, weights=data)[used] / count
    within = float(np.sum(data**2) - np.sum(count * mean**2)) / data.size
    return _RadialProfile(
        np.bincount(shell, weights=radius)[used] / count, mean, count.astype(np.float64), max(within, 0.0)
    )
