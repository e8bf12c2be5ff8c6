"""Invented line sources for the tests, made without any function of the library.

A line is cut into points, each blurred on its own by the closed form of a 3-D Gaussian, and summed: the tilt, the ends
and the capillary's thickness need no formula of a section. Positions in mm; the centre of the first voxel is at 0.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

FWHM_PER_SIGMA = 2.0 * np.sqrt(2.0 * np.log(2.0))
ENDLESS = (-1e3, 1e3)


@dataclass(frozen=True)
class Capillary:
    """Place (mm) at the height `at_mm`, slope by z, ends (z, mm), activity, and how much more of it a mm of z brings.

    `sag_mm`: how far the line is bent along y at the ends of the field, against its middle.
    """

    place_mm: tuple[float, float]
    at_mm: float = 0.0
    slope: tuple[float, float] = (0.0, 0.0)
    ends_mm: tuple[float, float] = ENDLESS
    activity: float = 1.0
    gradient_per_mm: float = 0.0
    sag_mm: float = 0.0


def slope_of(tilt_deg: float, direction_deg: float = 37.0) -> tuple[float, float]:
    """Slope of a line tilted against z, towards a direction in the plane."""
    steep = np.tan(np.radians(tilt_deg))
    return float(steep * np.cos(np.radians(direction_deg))), float(steep * np.sin(np.radians(direction_deg)))


def lines(
    shape: tuple[int, int, int],
    *,
    voxel_mm: tuple[float, float, float],
    capillaries: list[Capillary],
    in_plane_mm: float,
    axial_mm: float,
    diameter_mm: float = 0.0,
) -> NDArray[np.float64]:
    """Lines whose peak is about 1 for activity 1; ends beyond the field are cut where they no longer reach into it."""
    x, y, z = (np.arange(n) * step for n, step in zip(shape, voxel_mm, strict=True))
    sigma, sigma_z = in_plane_mm / FWHM_PER_SIGMA, axial_mm / FWHM_PER_SIGMA
    volume = np.zeros((shape[0] * shape[1], shape[2]))
    # Points a fifth of a sigma apart sum to the integral to far below 1e-9 (trapezoidal rule on a Gaussian).
    step = 0.2 * min(sigma_z, sigma)
    for line in capillaries:
        low, high = max(line.ends_mm[0], -8.0 * sigma_z), min(line.ends_mm[1], z[-1] + 8.0 * sigma_z)
        count = int(np.ceil((high - low) / step))
        height = low + (np.arange(count) + 0.5) * (high - low) / count
        share = (high - low) / count / (np.sqrt(2.0 * np.pi) * sigma_z)
        weight = share * line.activity * (1.0 + line.gradient_per_mm * (height - line.at_mm))
        arch = line.sag_mm * ((height - z[-1] / 2) / max(z[-1] / 2, 1e-9)) ** 2
        along = np.array([*line.slope, 1.0]) / np.sqrt(1.0 + line.slope[0] ** 2 + line.slope[1] ** 2)
        for offset, part in _section(diameter_mm, along):
            px = line.place_mm[0] + line.slope[0] * (height - line.at_mm) + offset[0]
            py = line.place_mm[1] + line.slope[1] * (height - line.at_mm) + arch + offset[1]
            bells = [np.exp(-0.5 * ((v[:, None] - p) / sigma) ** 2) for v, p in ((x, px), (y, py))]
            up = np.exp(-0.5 * ((z[:, None] - height - offset[2]) / sigma_z) ** 2) * (part * weight)
            volume += np.einsum("ip,jp->ijp", *bells).reshape(-1, count) @ up.T
    return volume.reshape(shape)


def _section(diameter: float, along: NDArray[np.float64]) -> list[tuple[NDArray[np.float64], float]]:
    """Points (3,) of a disc across the line, and their weights: squares of a grid 11 across."""
    if diameter == 0.0:
        return [(np.zeros(3), 1.0)]
    first = np.cross(along, [1.0, 0.0, 0.0])
    first /= np.linalg.norm(first)
    second = np.cross(along, first)
    grid = ((np.arange(11) + 0.5) / 11 - 0.5) * diameter
    inside = [a * first + b * second for a in grid for b in grid if a * a + b * b <= diameter**2 / 4]
    return [(point, 1.0 / len(inside)) for point in inside]
