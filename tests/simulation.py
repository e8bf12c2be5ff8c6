"""Invented phantoms for the tests, made without any function of the library.

Truth is stated as everywhere in Evenblur: a continuous object, convolved with a Gaussian, sampled at voxel centres.
Cylinders are made from the closed form of their Fourier transform times that of the Gaussian; sampling folds the
spectrum, so the copies beyond the voxels' Nyquist frequency are added until they are below 1e-9 of the object.
Positions are in mm; the centre of the first voxel is at 0.
"""

from itertools import product

import numpy as np
from numpy.typing import NDArray
from scipy import special

FWHM_PER_SIGMA = 2.0 * np.sqrt(2.0 * np.log(2.0))


def gaussian_noise(
    shape: tuple[int, ...], *, fwhm_mm: float, voxel_mm: tuple[float, ...], rng: np.random.Generator
) -> NDArray[np.float64]:
    """Noise of standard deviation 1 in every voxel, with Gaussian autocorrelation like white noise after a filter.

    `fwhm_mm` is the width of the filter; the autocorrelation is sqrt(2) times wider. The filter works on a circle, and
    is scaled so that the variance of each voxel is exactly 1. 0 gives white noise.
    """
    white = rng.standard_normal(shape)
    if fwhm_mm == 0.0:
        return white
    transfer = np.ones(())
    for axis, (count, step) in enumerate(zip(shape, voxel_mm, strict=True)):
        last = axis == len(shape) - 1
        frequency = np.fft.rfftfreq(count, step) if last else np.fft.fftfreq(count, step)
        along = np.exp(-2.0 * (np.pi * fwhm_mm / FWHM_PER_SIGMA * frequency) ** 2)
        full = np.exp(-2.0 * (np.pi * fwhm_mm / FWHM_PER_SIGMA * np.fft.fftfreq(count, step)) ** 2)
        along = along / np.sqrt(np.mean(full**2))
        transfer = transfer[..., None] * along
    return np.fft.irfftn(np.fft.rfftn(white) * transfer, s=shape, axes=tuple(range(len(shape))))


def add_noise(
    volume: NDArray[np.float64],
    *,
    level: float,
    fwhm_mm: float = 5.0,
    voxel_mm: tuple[float, float, float],
    rng: np.random.Generator,
) -> NDArray[np.float64]:
    """The volume plus noise whose standard deviation is `level` (in the volume's own unit) in every voxel.

    For a coefficient of variation of 5 % in a region of activity 1000 give level=50. `fwhm_mm` is the width of the
    Gaussian that the white noise was filtered with.
    """
    return volume + level * gaussian_noise(volume.shape, fwhm_mm=fwhm_mm, voxel_mm=voxel_mm, rng=rng)


def _copies(count: int, step: float, sigma: float) -> list[NDArray[np.float64]]:
    """Frequencies (1/mm) of a grid's Fourier series, and of the copies that sampling folds onto them."""
    base = np.fft.fftfreq(count, step)
    found = [base]
    for m in range(1, 50):
        if np.exp(-2.0 * (np.pi * sigma * (m - 0.5) / step) ** 2) < 1e-9:
            break
        found += [base + m / step, base - m / step]
    return found


def _disc_transform(frequency: NDArray[np.float64], radius: float) -> NDArray[np.float64]:
    """Fourier transform of a disc: R J1(2 pi R k) / k; pi R^2 at k = 0."""
    safe = np.where(frequency == 0.0, 1.0, frequency)
    return np.where(frequency == 0.0, np.pi * radius**2, radius * special.j1(2.0 * np.pi * radius * safe) / safe)


def disc(
    shape: tuple[int, int],
    *,
    voxel_mm: tuple[float, float],
    centre_mm: tuple[float, float],
    radius_mm: float,
    covariance_mm2: NDArray[np.float64],
    slope: tuple[float, float] = (0.0, 0.0),
) -> NDArray[np.float64]:
    """Section of an endless cylinder of activity 1 along (slope_x, slope_y, 1) by the plane of a slice, blurred.

    The section is an ellipse; `covariance_mm2` is the 2-D covariance of the blur within that plane.
    """
    padded = [
        n + int(np.ceil((16.0 * np.sqrt(covariance_mm2.max()) + 2) / step))
        for n, step in zip(shape, voxel_mm, strict=True)
    ]
    # A disc near the border must not come back in from the other side.
    padded = [max(n, int(np.ceil(2.6 * radius_mm / step)) + n // 2) for n, step in zip(padded, voxel_mm, strict=True)]
    along = np.array(slope) / np.sqrt(1.0 + slope[0] ** 2 + slope[1] ** 2)
    values, vectors = np.linalg.eigh(np.eye(2) - np.outer(along, along))
    stretch = (vectors / np.sqrt(values)) @ vectors.T  # the ellipse is the disc, stretched along the tilt
    narrow = np.sqrt(np.linalg.eigvalsh(covariance_mm2)[0])
    spectrum = np.zeros(padded, dtype=complex)
    for fx, fy in product(_copies(padded[0], voxel_mm[0], narrow), _copies(padded[1], voxel_mm[1], narrow)):
        kx, ky = fx[:, None], fy[None, :]
        length = np.hypot(stretch[0, 0] * kx + stretch[0, 1] * ky, stretch[1, 0] * kx + stretch[1, 1] * ky)
        blur = covariance_mm2[0, 0] * kx**2 + 2 * covariance_mm2[0, 1] * kx * ky + covariance_mm2[1, 1] * ky**2
        phase = np.exp(-2j * np.pi * (kx * centre_mm[0] + ky * centre_mm[1]))
        spectrum += _disc_transform(length, radius_mm) * np.exp(-2.0 * np.pi**2 * blur) * phase
    spectrum *= np.linalg.det(stretch) / (voxel_mm[0] * voxel_mm[1])
    return np.fft.ifft2(spectrum).real[: shape[0], : shape[1]]


def endless_cylinder(
    shape: tuple[int, int, int],
    *,
    voxel_mm: tuple[float, float, float],
    centre_mm: tuple[float, float],
    radius_mm: float,
    in_plane_mm: float,
    axial_mm: float,
    slope: tuple[float, float] = (0.0, 0.0),
) -> NDArray[np.float64]:
    """Cylinder of activity 1 that leaves the field at both ends; `centre_mm` holds in the first slice.

    The blur along z moves a tilted cylinder sideways: within a slice the covariance is
    sigma_xy^2 I + sigma_z^2 t t' with t the slope.
    """
    sigma, sigma_z = in_plane_mm / FWHM_PER_SIGMA, axial_mm / FWHM_PER_SIGMA
    covariance = sigma**2 * np.eye(2) + sigma_z**2 * np.outer(slope, slope)
    volume = np.empty(shape)
    for k in range(shape[2]):
        if k and slope == (0.0, 0.0):
            volume[..., k] = volume[..., 0]
            continue
        z = k * voxel_mm[2]
        volume[..., k] = disc(
            shape[:2],
            voxel_mm=voxel_mm[:2],
            centre_mm=(centre_mm[0] + slope[0] * z, centre_mm[1] + slope[1] * z),
            radius_mm=radius_mm,
            covariance_mm2=covariance,
            slope=slope,
        )
    return volume


def straight_cylinder(
    shape: tuple[int, int, int],
    *,
    voxel_mm: tuple[float, float, float],
    centre_mm: tuple[float, float],
    radius_mm: float,
    ends_mm: tuple[float, float],
    in_plane_mm: float,
    axial_mm: float,
) -> NDArray[np.float64]:
    """Cylinder of activity 1 along z between two positions (−inf and inf allowed): a disc times two error functions."""
    flat = disc(
        shape[:2],
        voxel_mm=voxel_mm[:2],
        centre_mm=centre_mm,
        radius_mm=radius_mm,
        covariance_mm2=(in_plane_mm / FWHM_PER_SIGMA) ** 2 * np.eye(2),
    )
    z = np.arange(shape[2]) * voxel_mm[2]
    sigma_z = axial_mm / FWHM_PER_SIGMA
    along = special.ndtr((z - ends_mm[0]) / sigma_z) - special.ndtr((z - ends_mm[1]) / sigma_z)
    return flat[..., None] * along


def tilted_cylinder(
    shape: tuple[int, int, int],
    *,
    voxel_mm: tuple[float, float, float],
    centre_mm: tuple[float, float, float],
    radius_mm: float,
    length_mm: float,
    in_plane_mm: float,
    axial_mm: float,
    slope: tuple[float, float],
) -> NDArray[np.float64]:
    """Whole cylinder of activity 1 about its middle, tilted, with flat ends across its axis: in 3-D Fourier space."""
    sigmas = np.array([in_plane_mm, in_plane_mm, axial_mm]) / FWHM_PER_SIGMA
    axis = np.array([*slope, 1.0]) / np.sqrt(1.0 + slope[0] ** 2 + slope[1] ** 2)
    reach = radius_mm * np.sqrt(1.0 - axis**2) + length_mm / 2 * np.abs(axis) + 8.0 * sigmas
    padded = []
    for n, step, far, middle in zip(shape, voxel_mm, reach, centre_mm, strict=True):
        low, high = min(0.0, middle - far), max(n * step, middle + far)
        padded.append(int(np.ceil((high - low) / step)) + 1)
    spectrum = np.zeros(padded, dtype=complex)
    copies = [_copies(n, step, sigma) for n, step, sigma in zip(padded, voxel_mm, sigmas, strict=True)]
    for fx, fy, fz in product(*copies):
        kx, ky, kz = fx[:, None, None], fy[None, :, None], fz[None, None, :]
        along = axis[0] * kx + axis[1] * ky + axis[2] * kz
        across = np.sqrt(np.maximum(kx**2 + ky**2 + kz**2 - along**2, 0.0))
        blur = sum((s * k) ** 2 for s, k in zip(sigmas, (kx, ky, kz), strict=True))
        phase = np.exp(-2j * np.pi * (kx * centre_mm[0] + ky * centre_mm[1] + kz * centre_mm[2]))
        ends = length_mm * np.sinc(length_mm * along)
        spectrum += _disc_transform(across, radius_mm) * ends * np.exp(-2.0 * np.pi**2 * blur) * phase
    volume = np.fft.ifftn(spectrum / np.prod(voxel_mm)).real
    return volume[: shape[0], : shape[1], : shape[2]]


def point_sources(
    shape: tuple[int, int, int],
    *,
    voxel_mm: tuple[float, float, float],
    positions_mm: list[tuple[float, float, float]],
    in_plane_mm: float,
    axial_mm: float,
    peak: float = 1.0,
) -> NDArray[np.float64]:
    """Points, blurred: one Gaussian of the given peak at each position, in closed form."""
    x, y, z = (np.arange(n) * step for n, step in zip(shape, voxel_mm, strict=True))
    sigma, sigma_z = in_plane_mm / FWHM_PER_SIGMA, axial_mm / FWHM_PER_SIGMA
    volume = np.zeros(shape)
    for px, py, pz in positions_mm:
        profiles = (np.exp(-0.5 * ((x - px) / sigma) ** 2), np.exp(-0.5 * ((y - py) / sigma) ** 2))
        volume += peak * np.einsum("i,j,k->ijk", *profiles, np.exp(-0.5 * ((z - pz) / sigma_z) ** 2))
    return volume


def sphere_sources(
    shape: tuple[int, int, int],
    *,
    voxel_mm: tuple[float, float, float],
    positions_mm: list[tuple[float, float, float]],
    diameter_mm: float,
    in_plane_mm: float,
    axial_mm: float,
    pieces: int = 15,
) -> NDArray[np.float64]:
    """Small spheres of one activity, each cut into cubes (`pieces` across) that are blurred as points; peak about 1."""
    offsets = (np.arange(pieces) + 0.5) / pieces * diameter_mm - diameter_mm / 2
    inside = [p for p in product(offsets, repeat=3) if sum(q * q for q in p) <= diameter_mm**2 / 4]
    volume = np.zeros(shape)
    for centre in positions_mm:
        moved = [tuple(c + q for c, q in zip(centre, p, strict=True)) for p in inside]
        volume += point_sources(
            shape, voxel_mm=voxel_mm, positions_mm=moved, in_plane_mm=in_plane_mm, axial_mm=axial_mm
        )
    return volume / len(inside)
