"""Slices through an object with a digital reference: measured, fitted, difference."""

from typing import Any

import numpy as np
from numpy.typing import NDArray

from evenblur.phantoms.pictures import slice_record, slice_through
from evenblur.phantoms.reference_fit import State
from evenblur.phantoms.reference_model import ReferenceModel
from evenblur.phantoms.rigid import voxel_centres


def reference_slices(
    image: NDArray[np.float64],
    *,
    voxel_mm: tuple[float, float, float],
    model: ReferenceModel,
    state: State,
    margin_mm: float,
) -> list[dict[str, Any]]:
    """An axial and a coronal slice through the object's middle; see `pictures`.

    Beyond `margin_mm` of the object nothing was fitted: there the pictures of fit and difference are empty.
    """
    step, last = np.array(voxel_mm), np.array(image.shape) - 1
    corners = np.stack(np.meshgrid(*[(0.0, extent) for extent in model.extent_mm], indexing="ij"), axis=-1)
    hull = state.motion.apply(corners.reshape(-1, 3) + model.low_mm)
    blur = np.array([state.in_plane_mm, state.in_plane_mm, state.axial_mm])
    planes = [
        slice_through(
            image.shape,
            plane=name,
            voxel_mm=voxel_mm,
            middle=state.motion.centre_mm / step + last / 2.0,
            low=(hull.min(axis=0) - blur) / step + last / 2.0,
            high=(hull.max(axis=0) + blur) / step + last / 2.0,
        )
        for name in ("axial", "coronal")
    ]
    centres = voxel_centres(image.shape, voxel_mm)
    records = []
    for plane in planes:
        points = np.stack([centres[axis][plane.voxels[:, axis]] for axis in range(3)], axis=1)
        value = model.sample(points, motion=state.motion, in_plane_mm=state.in_plane_mm, axial_mm=state.axial_mm).value
        near = model.within(points, motion=state.motion, margin_mm=margin_mm)
        records.append(
            slice_record(image, plane=plane, fitted=np.where(near, state.scale * value + state.offset, np.nan))
        )
    return records
