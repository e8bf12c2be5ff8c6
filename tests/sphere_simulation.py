"""Invented sphere phantoms for the tests, made without any function of the library.

Truth is stated as everywhere in Evenblur: a continuous object, convolved with a Gaussian, sampled at voxel centres.
A ball is made in frequency space: its Fourier transform 4 pi (sin kR − kR cos kR) / k^3 times the Gaussian's transfer
function, on a grid so fine that the Gaussian has died out at its Nyquist frequency, and back by the FFT.
`ball_by_counting` is the slow second way: sub-cells counted on a fine grid, no formula for a ball at all.
"""

from collections.abc import Sequence
from math import ceil

import numpy as np
from numpy.typing import NDArray

FWHM_PER_SIGMA = 2.0 * np.sqrt(2.0 * np.log(2.0))

Array = NDArray[np.float64]
Triple = tuple[float, float, float]

STANDARD_DIAMETERS_MM = (10.0, 13.0, 17.0, 22.0, 28.0, 37.0)


def add_ball(
    volume: Array, *, voxel_mm: Triple, centre_mm: Triple, radius_mm: float, sigma_mm: Triple, value: float
) -> None:
    """Add a blurred ball to a volume in place; `centre_mm` counts from the centre of the first voxel."""
    step, centre, sigma = np.array(voxel_mm), np.array(centre_mm), np.array(sigma_mm)
    half = radius_mm + 6.5 * sigma + 2.0 * step
    low = np.floor((centre - half) / step).astype(int)
    count = np.ceil((centre + half) / step).astype(int) - low
    # exp(-(sigma pi / h)^2 / 2) < 1e-9 at the fine grid's Nyquist frequency.
    fine = [max(1, ceil(6.5 * h / (np.pi * s))) for h, s in zip(step, sigma, strict=True)]
    k = [2.0 * np.pi * np.fft.fftfreq(n * f, h / f) for n, f, h in zip(count, fine, step, strict=True)]
    kx, ky, kz = k[0][:, None, None], k[1][:, None], k[2]
    kr = np.sqrt(kx**2 + ky**2 + kz**2) * radius_mm
    small = kr < 1e-2
    safe = np.where(small, 1.0, kr)
    form = np.where(small, 1.0 / 3.0 - kr**2 / 30.0, (np.sin(safe) - safe * np.cos(safe)) / safe**3)
    start = low * step - centre
    spectrum = 4.0 * np.pi * radius_mm**3 * form.astype(complex)
    for axis, (frequency, s, origin) in enumerate(zip(k, sigma, start, strict=True)):
        shape = [1, 1, 1]
        shape[axis] = -1
        spectrum *= (np.exp(-0.5 * (s * frequency) ** 2 + 1j * frequency * origin)).reshape(shape)
    cell = np.prod(step / np.array(fine))
    ball = np.fft.ifftn(spectrum).real[:: fine[0], :: fine[1], :: fine[2]] / cell
    source, target = [], []
    for first, n, size in zip(low, count, volume.shape, strict=True):
        begin, end = max(first, 0), min(first + n, size)
        if end <= begin:
            return
        target.append(slice(begin, end))
        source.append(slice(begin - first, end - first))
    volume[tuple(target)] += value * ball[tuple(source)]


def ball_by_counting(
    shape: tuple[int, int, int],
    *,
    voxel_mm: Triple,
    centre_mm: Triple,
    radius_mm: float,
    sigma_mm: Triple,
    fine: int,
    sub: int,
) -> Array:
    """A blurred ball the slow way: cells of a grid `fine` times finer, each with its share of sub-cells in the ball.

    The grid's transfer function is the Gaussian's divided by that of the cell's box, so the box does not widen it.
    Voxel (0, 0, 0) has its centre at 0. The ball must stay well inside the grid, which is a circle to the FFT.
    """
    inside = np.zeros(tuple(n * fine for n in shape))
    cells = [np.arange(n * fine) * (h / fine) for n, h in zip(shape, voxel_mm, strict=True)]
    points = (np.arange(sub) + 0.5) / sub - 0.5
    for a in points:
        for b in points:
            for c in points:
                x, y, z = (
                    cell + p * h / fine - m for cell, p, h, m in zip(cells, (a, b, c), voxel_mm, centre_mm, strict=True)
                )
                inside += x[:, None, None] ** 2 + y[:, None] ** 2 + z**2 < radius_mm**2
    spectrum = np.fft.fftn(inside / sub**3)
    for axis, (n, h, s) in enumerate(zip(shape, voxel_mm, sigma_mm, strict=True)):
        frequency = np.fft.fftfreq(n * fine, h / fine)
        along = np.exp(-2.0 * (np.pi * s * frequency) ** 2) / np.sinc(frequency * h / fine)
        spectrum *= np.expand_dims(along, tuple(i for i in range(3) if i != axis))
    return np.fft.ifftn(spectrum).real[::fine, ::fine, ::fine]


def ring_centres(middle_mm: Triple, *, count: int = 6, radius_mm: float = 57.2, turn_deg: float = 17.0) -> list[Triple]:
    """Centres on a ring across the bed, as image-quality phantoms have them."""
    angles = np.deg2rad(turn_deg) + 2.0 * np.pi * np.arange(count) / count
    return [
        (float(middle_mm[0] + radius_mm * np.cos(a)), float(middle_mm[1] + radius_mm * np.sin(a)), middle_mm[2])
        for a in angles
    ]


def add_cylinder(
    volume: Array,
    *,
    voxel_mm: Triple,
    centre_mm: Triple,
    radii_mm: tuple[float, float],
    length_mm: float,
    sigma_mm: Triple,
    value: float,
) -> None:
    """Add a blurred elliptic cylinder along z in place: counted on a grid four times finer, smoothed by the FFT."""
    fine = 4
    reach = 60.0
    pads = [ceil(reach / h) for h in voxel_mm]
    axes = [
        (np.arange((n + 2 * p) * fine) / fine - p) * h for n, p, h in zip(volume.shape, pads, voxel_mm, strict=True)
    ]
    x, y, z = (axis - c for axis, c in zip(axes, centre_mm, strict=True))
    disc = ((x[:, None] / radii_mm[0]) ** 2 + (y / radii_mm[1]) ** 2 < 1.0).astype(float)
    rod = (np.abs(z) < length_mm / 2.0).astype(float)

    def transfer(axis: int) -> Array:
        frequency = np.fft.fftfreq(axes[axis].size, voxel_mm[axis] / fine)
        return np.exp(-2.0 * (np.pi * sigma_mm[axis] * frequency) ** 2)

    disc = np.fft.ifft2(np.fft.fft2(disc) * transfer(0)[:, None] * transfer(1)).real
    rod = np.fft.ifft(np.fft.fft(rod) * transfer(2)).real
    keep = [slice(p * fine, -p * fine, fine) for p in pads]
    volume += value * disc[keep[0], keep[1]][..., None] * rod[keep[2]]


def sphere_phantom(
    shape: tuple[int, int, int],
    *,
    voxel_mm: Triple,
    centres_mm: Sequence[Triple],
    fwhm_mm: tuple[float, float],
    diameters_mm: Sequence[float] = STANDARD_DIAMETERS_MM,
    wall_mm: float = 1.0,
    hot: float = 4.0,
    background: float = 1.0,
    body_radii_mm: tuple[float, float] | None = None,
    body_length_mm: float = 180.0,
    lung_radius_mm: float = 0.0,
) -> Array:
    """Hot spheres with cold walls in a background that fills the field, or an elliptic body with a cold lung insert.

    `fwhm_mm` is (in-plane, axial). The body stands in the middle of the field.
    """
    sigma = (fwhm_mm[0] / FWHM_PER_SIGMA, fwhm_mm[0] / FWHM_PER_SIGMA, fwhm_mm[1] / FWHM_PER_SIGMA)
    volume = np.zeros(shape)
    if body_radii_mm is None:
        volume += background
    else:
        middle = tuple((n - 1) * h / 2.0 for n, h in zip(shape, voxel_mm, strict=True))
        common = {"voxel_mm": voxel_mm, "centre_mm": middle, "length_mm": body_length_mm, "sigma_mm": sigma}
        add_cylinder(volume, radii_mm=body_radii_mm, value=background, **common)
        if lung_radius_mm > 0:
            add_cylinder(volume, radii_mm=(lung_radius_mm, lung_radius_mm), value=-background, **common)
    for centre, diameter in zip(centres_mm, diameters_mm, strict=True):
        ball = {"voxel_mm": voxel_mm, "centre_mm": centre, "sigma_mm": sigma}
        add_ball(volume, radius_mm=diameter / 2.0, value=hot, **ball)
        if background:
            add_ball(volume, radius_mm=diameter / 2.0 + wall_mm, value=-background, **ball)
    return volume
