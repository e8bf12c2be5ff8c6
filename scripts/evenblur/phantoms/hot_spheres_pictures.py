"""Slices through fitted hot spheres: measured, fitted, difference."""

from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from evenblur.phantoms.hot_spheres_fit import Sphere, SphereModel, Voxels
from evenblur.phantoms.hot_spheres_record import Fitted, Setting, triple
from evenblur.phantoms.pictures import Plane, slice_record, slice_through


def sphere_slices(setting: Setting, fitted: Fitted) -> list[dict[str, Any]]:
    """An axial slice through the spheres' middle and a coronal one through the largest; see `pictures`.

    The fit speaks for the spheres' surroundings only: elsewhere the pictures of fit and difference are empty.
    """
    fit, used = fitted.fit, _fitted_region(fitted.voxels, setting.volume.shape)
    centres = np.array([fit.centre_mm(k) for k in range(len(fitted.spheres))])
    largest = int(np.argmax([sphere.radius_mm for sphere in fitted.spheres]))
    middles = {"axial": np.median(centres, axis=0), "coronal": centres[largest]}
    low, high = fitted.voxels.index.min(axis=0), fitted.voxels.index.max(axis=0)
    records = []
    for name, middle in middles.items():
        plane = slice_through(
            setting.volume.shape,
            plane=name,
            voxel_mm=setting.voxel_mm,
            middle=middle / np.array(setting.voxel_mm),
            low=low,
            high=high,
        )
        values = np.where(used[tuple(plane.voxels.T)], _model_at(plane, setting, fitted, centres), np.nan)
        records.append(slice_record(setting.volume, plane=plane, fitted=values))
    return records


def _fitted_region(voxels: Voxels, shape: tuple[int, ...]) -> NDArray[np.bool_]:
    """Where the fit looked, with what lies between the voxels of a thinned choice."""
    used = np.zeros(shape, dtype=bool)
    used[tuple(voxels.index.T)] = True
    steps = [int(np.min(np.diff(np.unique(column)), initial=shape[k])) for k, column in enumerate(voxels.index.T)]
    if max(steps) == 1:
        return used
    grown: NDArray[np.bool_] = ndimage.maximum_filter(used, size=[2 * step - 1 for step in steps])
    return grown


def _model_at(plane: Plane, setting: Setting, fitted: Fitted, centres_mm: NDArray[np.float64]) -> NDArray[np.float64]:
    radii = np.array([sphere.radius_mm for sphere in fitted.spheres])
    mm = plane.voxels * np.array(setting.voxel_mm)
    surface = np.linalg.norm(mm[:, None] - centres_mm, axis=2) - radii
    model = SphereModel(
        setting.volume.shape,
        voxel_mm=setting.voxel_mm,
        spheres=[Sphere(float(r), triple(c)) for r, c in zip(radii, centres_mm, strict=True)],
        wall_mm=setting.wall_mm,
        voxels=Voxels(plane.voxels, np.argmin(surface, axis=1)),
        reach_sigma_mm=(fitted.fit.sigma_in_plane_mm, fitted.fit.sigma_axial_mm),
    )
    return model.values(fitted.fit.parameters)
