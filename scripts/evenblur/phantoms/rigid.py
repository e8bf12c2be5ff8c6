"""Rigid motions with flips: where a point of a measured image lies in a reference object.

Points are millimetres from the centre of their own array, shape (..., 3), in the order of the array axes. A motion
first flips the reference's axes (a wrong header does that), then turns it about a pivot, then shifts it.
"""

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

FLIPS: tuple[tuple[int, int, int], ...] = tuple((a, b, c) for a in (1, -1) for b in (1, -1) for c in (1, -1))
"""Every choice of axes to flip; an odd number of them is a mirror image, an even number half a turn."""

AXIS_NAMES = "xyz"


@dataclass(frozen=True)
class Motion:
    """A rigid motion of the reference onto the measured image: y = R F (x − pivot) + F pivot + translation.

    Attributes
    ----------
    translation_mm
        Shift of the pivot, shape (3,), from where it lies when both arrays' centres coincide.
    rotation
        Rotation matrix R, shape (3, 3).
    flip
        Signs of the reference's axes, the diagonal of F.
    pivot_mm
        The point of the reference that the rotation turns about, shape (3,).
    """

    translation_mm: NDArray[np.float64]
    rotation: NDArray[np.float64]
    flip: tuple[int, int, int]
    pivot_mm: NDArray[np.float64]

    @property
    def to_reference(self) -> NDArray[np.float64]:
        """Matrix that takes a difference of measured points to the reference's axes, F Rᵀ, shape (3, 3)."""
        return np.asarray(self.flip, dtype=np.float64)[:, None] * self.rotation.T

    @property
    def rotation_deg(self) -> NDArray[np.float64]:
        """Rotation vector (axis times angle) in degrees, shape (3,)."""
        return np.asarray(np.degrees(Rotation.from_matrix(self.rotation).as_rotvec()))

    @property
    def angle_deg(self) -> float:
        """Angle of the rotation, degrees."""
        return float(np.linalg.norm(self.rotation_deg))

    @property
    def centre_mm(self) -> NDArray[np.float64]:
        """Where the pivot lies in the measured image, shape (3,)."""
        return np.asarray(self.flip) * self.pivot_mm + self.translation_mm

    def apply_inverse(self, points_mm: NDArray[np.float64]) -> NDArray[np.float64]:
        """Where measured points lie in the reference, same shape (..., 3).

        Examples
        --------
        >>> still = Motion(np.array([1.0, 0.0, 0.0]), np.eye(3), (1, 1, 1), np.zeros(3))
        >>> still.apply_inverse(np.array([1.0, 2.0, 3.0])).tolist()
        [0.0, 2.0, 3.0]
        """
        return np.asarray((points_mm - self.centre_mm) @ self.to_reference.T + self.pivot_mm)

    def apply(self, points_mm: NDArray[np.float64]) -> NDArray[np.float64]:
        """Where reference points lie in the measured image, same shape (..., 3)."""
        return np.asarray((points_mm - self.pivot_mm) @ self.to_reference + self.centre_mm)

    def moved(self, shift_mm: NDArray[np.float64], turn_rad: NDArray[np.float64]) -> "Motion":
        """The motion followed by a shift (3,) and a small turn (rotation vector, radians) about the moved pivot."""
        turn = Rotation.from_rotvec(turn_rad).as_matrix()
        return replace(self, translation_mm=self.translation_mm + shift_mm, rotation=turn @ self.rotation)


def voxel_centres(shape: tuple[int, ...], voxel_mm: tuple[float, ...]) -> list[NDArray[np.float64]]:
    """Positions of voxel centres along each axis, mm from the array's centre.

    Examples
    --------
    >>> voxel_centres((3,), (2.0,))[0].tolist()
    [-2.0, 0.0, 2.0]
    """
    return [
        np.asarray((np.arange(count) - (count - 1) / 2.0) * step, dtype=np.float64)
        for count, step in zip(shape, voxel_mm, strict=True)
    ]


def motion_columns(
    gradient: NDArray[np.float64], points_mm: NDArray[np.float64], motion: Motion
) -> NDArray[np.float64]:
    """Derivative of a moved model by shift and turn.

    Parameters
    ----------
    gradient
        Gradient of the model along the measured axes at each point, shape (n, 3), per mm.
    points_mm
        Measured points, shape (n, 3).
    motion
        Where the object is.

    Returns
    -------
    numpy.ndarray
        Shape (n, 6): three columns per mm of shift, three per radian of turn about the moved pivot.

    Notes
    -----
    The image moves with the object: d/dshift = −gradient, d/dturn = −(lever × gradient). That turns the blur along with
    the object; `Sampled.turned` of `reference_model` takes it back.
    """
    lever = points_mm - motion.centre_mm
    return np.concatenate([-gradient, -np.cross(lever, gradient)], axis=1)
