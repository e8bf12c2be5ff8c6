"""What the record of a hot-sphere measurement holds: the spheres, their recovery coefficients, a radial profile."""

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from evenblur.phantoms.hot_spheres_fit import Sphere, SphereFit, Voxels
from evenblur.phantoms.recovery import recovery
from evenblur.widths import FWHM_PER_SIGMA

Array = NDArray[np.float64]
Triple = tuple[float, float, float]


@dataclass(frozen=True)
class Setting:
    """What one measurement is about."""

    volume: Array
    voxel_mm: Triple
    diameters_mm: tuple[float, ...]
    wall_mm: float
    contrast: float | None


@dataclass(frozen=True)
class Fitted:
    """A fit of spheres: their numbers in the list, what was fitted, and to which voxels."""

    numbers: tuple[int, ...]
    spheres: tuple[Sphere, ...]
    voxels: Voxels
    data: Array
    fit: SphereFit

    @property
    def fwhm_mm(self) -> tuple[float, float]:
        """In-plane and axial width, mm."""
        return FWHM_PER_SIGMA * self.fit.sigma_in_plane_mm, FWHM_PER_SIGMA * self.fit.sigma_axial_mm


def triple(values: Array) -> Triple:
    """Three numbers of an array as plain floats."""
    return float(values[0]), float(values[1]), float(values[2])


def sphere_table(fitted: Fitted) -> list[dict[str, Any]]:
    """Each fitted sphere's diameter, centre (mm from the centre of the first voxel) and background."""
    return [
        {
            "diameter_mm": 2.0 * sphere.radius_mm,
            "centre_mm": [round(c, 3) for c in triple(fitted.fit.centre_mm(k))],
            "background": fitted.fit.background(k),
        }
        for k, sphere in enumerate(fitted.spheres)
    ]


def recovery_table(setting: Setting, fitted: Fitted) -> list[dict[str, float | None]]:
    """Each fitted sphere's recovery coefficients (`evenblur.phantoms.recovery`), relative to the fitted hot level."""
    table: list[dict[str, float | None]] = []
    for k, sphere in enumerate(fitted.spheres):
        found = recovery(
            setting.volume,
            voxel_mm=setting.voxel_mm,
            centre_mm=triple(fitted.fit.centre_mm(k)),
            diameter_mm=2.0 * sphere.radius_mm,
            background=fitted.fit.background(k),
            true_level=fitted.fit.hot,
        )
        table.append(
            {
                "diameter_mm": 2.0 * sphere.radius_mm,
                "maximum": round(found.maximum, 4),
                "half_contour_mean": round(found.half_contour_mean, 4),
                "peak": None if found.peak is None else round(found.peak, 4),
            }
        )
    return table


def radial_profile(setting: Setting, fitted: Fitted) -> dict[str, Any]:
    """Radial profile of the largest fitted sphere: means over shells, measured and fitted, over the hot level."""
    number = int(np.argmax([sphere.radius_mm for sphere in fitted.spheres]))
    mine = fitted.voxels.owner == number
    positions = fitted.voxels.index[mine] * np.array(setting.voxel_mm)
    radius = np.linalg.norm(positions - fitted.fit.centre_mm(number), axis=1)
    shell = max(min(setting.voxel_mm) / 2.0, float(radius.max()) / 150.0)
    bins = (radius / shell).astype(np.int64)
    counts = np.bincount(bins)
    used = counts > 0
    measured = fitted.data[mine]

    def means(values: Array) -> Array:
        sums: Array = np.bincount(bins, weights=values)[used] / counts[used]
        return sums

    hot = fitted.fit.hot
    return {
        "label": f"Radial profile of the {2.0 * fitted.spheres[number].radius_mm:g} mm sphere",
        "unit": "share of the hot level",
        "position_mm": [round(float(v), 3) for v in means(radius)],
        "measured": [round(float(v), 5) for v in means(measured) / hot],
        "fitted": [round(float(v), 5) for v in means(measured - fitted.fit.residuals[mine]) / hot],
    }
