"""What an affine says about a voxel grid: sizes, the axial direction, how far it is tilted."""

from dataclasses import dataclass

import numpy as np

_SMALLEST_MM = 1e-6  # voxel sizes are kept to this


@dataclass(frozen=True)
class Grid:
    """A voxel grid as the harmonisation sees it.

    Attributes
    ----------
    shape
        Voxels along the three array axes.
    voxel_mm
        Voxel size along each array axis, mm.
    axial_axis
        The array axis that runs along the scanner's bed.
    oblique_deg
        Angle between that array axis and the bed, degrees. A rotation about the bed does not count: the in-plane
        width has no direction.
    """

    shape: tuple[int, int, int]
    voxel_mm: tuple[float, float, float]
    axial_axis: int
    oblique_deg: float

    @property
    def in_plane_axes(self) -> tuple[int, int]:
        """The two array axes across the bed, in array order."""
        first, second = (axis for axis in range(3) if axis != self.axial_axis)
        return first, second

    @property
    def voxel_ml(self) -> float:
        """Volume of a voxel, mL."""
        return float(np.prod(self.voxel_mm)) / 1000.0

    def widths_by_axis(self, in_plane_mm: float, axial_mm: float) -> tuple[float, float, float]:
        """Widths (mm) along the three array axes for an in-plane and an axial width (mm)."""
        first, second, third = (axial_mm if axis == self.axial_axis else in_plane_mm for axis in range(3))
        return first, second, third


def grid_from_affine(affine: np.ndarray, shape: tuple[int, ...]) -> Grid:
    """Read a grid off a 4 x 4 affine (voxel indices to mm, third world axis along the bed) and an array shape.

    Raises
    ------
    ValueError
        If the affine is not finite, is singular, or its axes are not at right angles to within 0.5 degrees.

    >>> grid_from_affine(np.diag([2.0, 2.0, 3.0, 1.0]), (10, 10, 5)).axial_axis
    2
    """
    columns = np.asarray(affine, dtype=float)[:3, :3]
    if not np.all(np.isfinite(affine)):
        raise ValueError("the affine holds values that are not finite")
    sizes = np.sqrt((columns**2).sum(axis=0))
    if np.any(sizes < _SMALLEST_MM):
        raise ValueError("the affine gives a voxel size of zero")
    directions = columns / sizes
    if abs(np.linalg.det(directions)) < 1e-6:
        raise ValueError("the affine is singular")
    if np.max(np.abs(directions.T @ directions - np.eye(3))) > np.sin(np.radians(0.5)):
        raise ValueError("the affine is sheared: its axes are not at right angles")
    along_bed = np.abs(directions[2])
    axial_axis = int(np.argmax(along_bed))
    oblique = float(np.degrees(np.arccos(min(1.0, along_bed[axial_axis]))))
    # Single-precision affines leave rounding of this order; it is not a tilt that anybody made.
    oblique = 0.0 if oblique < 0.02 else oblique
    return Grid(
        shape=(int(shape[0]), int(shape[1]), int(shape[2])),
        # Headers keep single precision: 2.0833333 must not become 2.08333325 in some records and not in others.
        voxel_mm=(round(float(sizes[0]), 6), round(float(sizes[1]), 6), round(float(sizes[2]), 6)),
        axial_axis=axial_axis,
        oblique_deg=round(oblique, 4),
    )
