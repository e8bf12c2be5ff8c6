"""A slice of a fitted cylinder: measured, fitted, difference."""

from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from evenblur.phantoms.cylinder_fit import REACH, WALL, CylinderFit, evaluate
from evenblur.phantoms.cylinder_start import Start, place
from evenblur.phantoms.pictures import slice_record, slice_through


def cylinder_slices(
    image: NDArray[np.float64], *, voxel_mm: tuple[float, float, float], fit: CylinderFit, start: Start
) -> list[dict[str, Any]]:
    """A slice through the cylinder's middle: coronal, with wall and ends, or axial where no end is seen.

    See `pictures` for the record.

    What belongs to another object is left out of the fit and of the difference. Where a tilted wall meets an end, the
    fit leaves the voxels out; the picture shows the product of both edges there, which is close to the convolution.
    """
    centre = (fit.value("centre_x"), fit.value("centre_y"))
    slope = (fit.value("slope_x"), fit.value("slope_y"))
    sigma, sigma_z = fit.value("sigma"), fit.value("sigma_z")
    reach = [fit.value("radius") + 6.0 * sigma + abs(part) * fit.sample.half_mm for part in slope]
    ends = [fit.end(which, "position") for which in (0, 1)]
    first = -np.inf if ends[0] is None else start.middle_mm + ends[0] - 6.0 * sigma_z
    last = np.inf if ends[1] is None else start.middle_mm + ends[1] + 6.0 * sigma_z
    whole = (0.0, (image.shape[2] - 1) * voxel_mm[2])
    plane = slice_through(
        image.shape,
        plane="coronal" if any(fit.sample.ends) else "axial",
        voxel_mm=voxel_mm,
        middle=(centre[0] / voxel_mm[0], centre[1] / voxel_mm[1], start.middle_mm / voxel_mm[2]),
        low=(
            (centre[0] - reach[0]) / voxel_mm[0],
            (centre[1] - reach[1]) / voxel_mm[1],
            max(first, whole[0]) / voxel_mm[2],
        ),
        high=(
            (centre[0] + reach[0]) / voxel_mm[0],
            (centre[1] + reach[1]) / voxel_mm[1],
            min(last, whole[1]) / voxel_mm[2],
        ),
    )
    points = (plane.voxels * np.array(voxel_mm)).T
    placed = place((points[0], points[1], points[2]), centre_mm=centre, slope=slope, middle_mm=start.middle_mm)
    # Near an end the fit has the end's own levels, as far in as its voxels were taken.
    inner = max(fit.value("radius") - REACH * sigma, 0.6 * fit.value("radius"))
    group = np.full(placed.rho.shape, WALL, dtype=np.int64)
    for which, end in enumerate(ends):
        if end is not None:
            near = (np.abs(placed.along - end) < 1.4 * REACH * sigma_z) & (placed.rho < inner)
            group[near] = which + 1
    sample = replace(fit.sample, values=np.zeros(placed.rho.size), points=points, group=group)
    fitted = evaluate(fit.fitted.parameters, sample)[0]
    if start.others is not None:
        fitted = np.where(start.others[tuple(plane.voxels.T)], np.nan, fitted)
    return [slice_record(image, plane=plane, fitted=fitted)]
