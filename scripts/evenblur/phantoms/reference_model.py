"""A digital reference object, piecewise constant over its voxels, blurred by a Gaussian and sampled anywhere.

The blurred object is made from its Fourier transform: discrete transform of the voxel values, times the transform of
one voxel's box (so the box belongs to the object, not to the blur), times the Gaussian. It is written as coefficients
of a quintic B-spline on a grid of a third of the narrower width, divided by the spline's own transform. What the
spline gets wrong are images of the spectrum beyond the grid's sampling frequency: relative to the spectrum at angular
frequency w (radians per grid step) at most exp(−w² s² / 2) (w / (2 pi − w))⁶ with s = 1.27 steps, 4e-4 at its worst
(w = 2), and they average out over the sub-grid positions of the samples.
"""

from dataclasses import dataclass
from functools import lru_cache
from typing import Any, Final, Literal

import numpy as np
from numpy.typing import NDArray
from scipy import fft, ndimage

from evenblur.phantoms.base import MeasurementError
from evenblur.phantoms.rigid import Motion
from evenblur.widths import FWHM_PER_SIGMA

STEPS_PER_WIDTH = 3.0
"""Synthesis steps across the narrower width."""

MARGIN_WIDTHS = 1.7
"""Beyond this many widths from an edge a Gaussian edge is within 3e-5 of its plateau (4 sigma)."""

_SPLINE_ORDER: Final = 5
_ROUGH_ORDER: Final = 3
_MOST_GRID_POINTS = 30_000_000
_SUPPORT = 0.01
_DISTANCE_REACH_MM = 60.0
_ZERO = 1e-6


@dataclass(frozen=True)
class Sampled:
    """The blurred object at points, and its derivatives; arrays of shape (n,), gradient (n, 3), None if not asked.

    `value` has the reference's unit; `gradient` is along the measured image's axes, per mm; `in_plane` and `axial` are
    derivatives by the variance (sigma²) of the blur, per mm²; `turned` (n, 3) is the change per radian that a turn
    of the object brings because the blur does not turn with it; `fourth` is the blurred object's fourth derivative
    (s · D)⁴ with s the sigmas, without unit beyond the reference's: what a sharpened edge adds.
    """

    value: NDArray[np.float64]
    gradient: NDArray[np.float64] | None = None
    in_plane: NDArray[np.float64] | None = None
    axial: NDArray[np.float64] | None = None
    turned: NDArray[np.float64] | None = None
    fourth: NDArray[np.float64] | None = None


class ReferenceModel:
    """A reference volume as a continuous object.

    Parameters
    ----------
    volume
        Relative activity, shape (x, y, z), zero outside the object.
    voxel_mm
        Voxel size along each axis, mm.

    Raises
    ------
    MeasurementError
        If the volume is not 3-D, not finite, or holds no object.

    Examples
    --------
    >>> model = ReferenceModel(np.ones((20, 20, 20)), voxel_mm=(2.0, 2.0, 2.0))
    >>> still = Motion(np.zeros(3), np.eye(3), (1, 1, 1), model.centre_mm)
    >>> points = np.array([[0.0, 0.0, 0.0], [20.0, 0.0, 0.0]])
    >>> model.sample(points, motion=still, in_plane_mm=6.0, axial_mm=6.0).value.round(3).tolist()
    [1.0, 0.5]
    """

    def __init__(self, volume: NDArray[np.float64], *, voxel_mm: tuple[float, float, float]) -> None:
        values = np.asarray(volume, dtype=np.float64)
        if values.ndim != 3:
            raise MeasurementError(f"the reference has {values.ndim} axes where a volume has 3")
        if not np.all(np.isfinite(values)):
            raise MeasurementError("the reference holds values that are not finite")
        if len(voxel_mm) != 3 or not all(np.isfinite(size) and size > 0 for size in voxel_mm):
            raise MeasurementError("the reference's voxel sizes are not three positive numbers")
        level = float(np.max(values, initial=0.0))
        if level <= 0.0 or float(np.min(values)) < -0.01 * level:
            raise MeasurementError("the reference holds no activity, or negative activity")
        inside = values > _ZERO * level
        if min(values.shape) < 2:
            raise MeasurementError("the reference is a single layer")
        self.level = level
        # The level that most of the activity has: one hot spot does not stand for the object.
        self.usual_level = float(np.average(values[inside], weights=values[inside]))
        self.voxel_mm = np.asarray(voxel_mm, dtype=np.float64)
        self.open_faces = _open_faces(values, level)
        bounds = [_bounds(np.any(inside, axis=tuple(a for a in range(3) if a != axis))) for axis in range(3)]
        self.values = values[tuple(slice(low, high) for low, high in bounds)]
        self.low_mm = np.array([(b[0] - n / 2.0) for b, n in zip(bounds, values.shape, strict=True)]) * self.voxel_mm
        self.extent_mm = np.array(self.values.shape) * self.voxel_mm
        axes = [low + (np.arange(n) + 0.5) * step for low, n, step in self._axes()]
        total = float(self.values.sum())
        sums = [self.values.sum(axis=tuple(a for a in range(3) if a != axis)) for axis in range(3)]
        self.centre_mm = np.array([float(np.dot(s, at)) / total for s, at in zip(sums, axes, strict=True)])
        self._distance: tuple[NDArray[np.float32], NDArray[np.float64], NDArray[np.float64]] | None = None
        # Bound methods cannot carry a shared cache without keeping every model alive, so each model has its own.
        self._spectrum = lru_cache(maxsize=2)(self._make_spectrum)

    def _axes(self) -> list[tuple[float, int, float]]:
        return [(float(self.low_mm[a]), self.values.shape[a], float(self.voxel_mm[a])) for a in range(3)]

    @property
    def narrowest_mm(self) -> float:
        """Narrowest width (mm) that the synthesis grid of this object can show within the memory allowed."""
        volume = float(np.prod(self.extent_mm + 32.0))
        return STEPS_PER_WIDTH * float((volume / (0.8 * _MOST_GRID_POINTS)) ** (1.0 / 3.0))

    def within(self, points_mm: NDArray[np.float64], *, motion: Motion, margin_mm: float) -> NDArray[np.bool_]:
        """Which measured points, shape (n, 3), lie within a margin (mm, at most 60) of the object's activity.

        Points nearer than the margin to a face of the reference's array that cuts the object are left out: what lies
        beyond that face is not known.
        """
        if self._distance is None:
            self._distance = self._make_distance()
        distance, low, step = self._distance
        reference_points = motion.apply_inverse(points_mm)
        index = np.rint((reference_points - low) / step - 0.5).astype(int)
        inside = np.all((index >= 0) & (index < np.array(distance.shape)), axis=-1)
        near = np.zeros(inside.shape, dtype=bool)
        near[inside] = distance[tuple(index[inside].T)] <= margin_mm
        for axis, side in self.open_faces:
            face = self.low_mm[axis] + (self.extent_mm[axis] if side > 0 else 0.0)
            near &= (face - reference_points[..., axis]) * side >= margin_mm
        return near

    def _make_distance(self) -> tuple[NDArray[np.float32], NDArray[np.float64], NDArray[np.float64]]:
        # A step of at least a hundredth of the object: the margin is a matter of millimetres, not of exactness.
        stride = np.maximum(1, np.floor(np.max(self.extent_mm) / 100.0 / self.voxel_mm)).astype(int)
        support = self.values > _SUPPORT * self.level
        for axis in range(3):
            edges = np.arange(0, support.shape[axis], stride[axis])
            support = np.logical_or.reduceat(support, edges, axis=axis)
        step = self.voxel_mm * stride
        extra = np.ceil(_DISTANCE_REACH_MM / step).astype(int)
        support = np.pad(support, [(int(n), int(n)) for n in extra])
        distance = ndimage.distance_transform_edt(~support, sampling=tuple(step)).astype(np.float32)
        return distance, self.low_mm - extra * step, step

    def sample(
        self,
        points_mm: NDArray[np.float64],
        *,
        motion: Motion,
        in_plane_mm: float,
        axial_mm: float,
        derivatives: bool = False,
        fourth: bool = False,
        rough: bool = False,
    ) -> Sampled:
        """The moved object, blurred in the measured image's axes, at points of the measured image.

        Parameters
        ----------
        points_mm
            Points from the measured array's centre, shape (n, 3), mm.
        motion
            Where the object is.
        in_plane_mm, axial_mm
            Widths (FWHM) of the blur along the measured x and y axes, and z axis.
        derivatives, fourth
            Which derivatives to give as well.
        rough
            Cubic instead of quintic splines: a third of the time, enough for a search.

        Returns
        -------
        Sampled

        Raises
        ------
        MeasurementError
            If the widths are too narrow for so large a reference.
        """
        grid = self._grid(in_plane_mm, axial_mm)
        reference_points = motion.apply_inverse(points_mm)
        index = (reference_points - self.low_mm).T / grid.step_mm[:, None]
        order: Literal[3, 5] = _ROUGH_ORDER if rough else _SPLINE_ORDER
        base, along_z, square = self._blurred_spectrum(grid, motion, in_plane_mm, axial_mm, order)

        def at_points(spectrum: NDArray[Any]) -> NDArray[np.float64]:
            coefficients = fft.irfftn(spectrum, s=grid.shape)
            return np.asarray(
                ndimage.map_coordinates(coefficients, index, order=order, mode="grid-wrap", prefilter=False)
            )

        gradient = in_plane = axial = turned = quartic = None
        value = at_points(base)
        if derivatives:
            along = [at_points(base * (1j * frequency)) for frequency in grid.frequencies]
            gradient = np.stack(along, axis=1) @ motion.to_reference
            axial = at_points(base * (-0.5 * along_z))
            in_plane = at_points(base * (-0.5 * (square - along_z)))
            wx, wy, wz = (self._along(grid, motion, axis) for axis in range(3))
            excess = (axial_mm**2 - in_plane_mm**2) / FWHM_PER_SIGMA**2
            turned = np.zeros_like(gradient)
            if abs(excess) > 1e-9:
                turned[:, 0] = at_points(base * (-excess * wy * wz))
                turned[:, 1] = at_points(base * (excess * wx * wz))
        if fourth:
            wave = (in_plane_mm**2 * (square - along_z) + axial_mm**2 * along_z) / FWHM_PER_SIGMA**2
            quartic = at_points(base * wave**2)
        return Sampled(value, gradient, in_plane, axial, turned, quartic)

    def _grid(self, in_plane_mm: float, axial_mm: float) -> "_SynthesisGrid":
        narrow, wide = min(in_plane_mm, axial_mm), max(in_plane_mm, axial_mm)
        # Rounded up in steps of 8 mm for the same reason as the step below. The object's periodic images stay the
        # margin of a point outside it, plus their own blur, away.
        padding = 8.0 * np.ceil(2.0 * MARGIN_WIDTHS * wide / 8.0) + 8.0
        # Steps come in quarter octaves, so that the grid and the object's transform stay while the widths settle.
        step = 2.0 ** (np.floor(4.0 * np.log2(narrow / STEPS_PER_WIDTH)) / 4.0)
        split = np.ceil(self.voxel_mm / step - 1e-9).astype(int)
        fine = self.voxel_mm / split
        full = [fft.next_fast_len(int(np.ceil(size)), real=True) for size in (self.extent_mm + padding) / fine]
        period = np.array(full) * fine
        shape = [
            min(fft.next_fast_len(int(np.ceil(p / step)), real=True), n) for p, n in zip(period, full, strict=True)
        ]
        if float(np.prod(np.array(shape, dtype=float))) > 2 * _MOST_GRID_POINTS:
            raise MeasurementError(
                f"a width of {narrow:.2f} mm is too narrow to be measured with a reference of "
                f"{' × '.join(f'{size:.0f}' for size in self.extent_mm)} mm"
            )
        return _SynthesisGrid(
            shape=(shape[0], shape[1], shape[2]),
            full=(full[0], full[1], full[2]),
            split=(int(split[0]), int(split[1]), int(split[2])),
            step_mm=period / np.array(shape),
        )

    @staticmethod
    def _along(grid: "_SynthesisGrid", motion: Motion, axis: int) -> NDArray[np.float64]:
        """Angular frequency along an axis of the measured image, per mm."""
        x, y, z = (f * part for f, part in zip(grid.frequencies, motion.to_reference[:, axis], strict=True))
        return np.asarray(x + y + z)

    def _blurred_spectrum(
        self, grid: "_SynthesisGrid", motion: Motion, in_plane_mm: float, axial_mm: float, order: int
    ) -> tuple[NDArray[Any], NDArray[Any], NDArray[Any]]:
        fx, fy, fz = grid.frequencies
        along_z = self._along(grid, motion, 2) ** 2
        square = fx**2 + fy**2 + fz**2
        in_plane, axial = (in_plane_mm / FWHM_PER_SIGMA) ** 2, (axial_mm / FWHM_PER_SIGMA) ** 2
        base = self._spectrum(grid.shape, grid.full, grid.split, order) * np.exp(
            -0.5 * (in_plane * square + (axial - in_plane) * along_z)
        )
        return base, along_z, square

    def _make_spectrum(
        self, shape: tuple[int, int, int], full: tuple[int, int, int], split: tuple[int, int, int], degree: int
    ) -> NDArray[np.complex128]:
        """Transform of the object up to the synthesis grid's Nyquist frequency, over the spline's own, unblurred."""
        spectrum: NDArray[Any] = self.values
        # One axis at a time, cut to the wanted frequencies at once: a fine reference never stands in full.
        for axis in (2, 1, 0):
            spectrum = np.repeat(spectrum, split[axis], axis=axis)
            count = shape[axis]
            if axis == 2:
                spectrum = fft.rfft(spectrum, n=full[axis], axis=axis)
                order = np.arange(count // 2 + 1)
            else:
                spectrum = fft.fft(spectrum, n=full[axis], axis=axis)
                order = np.rint(fft.fftfreq(count) * count).astype(int)
            factor = np.sinc(order / full[axis]) * np.exp(-1j * np.pi * order / full[axis]) * count / full[axis]
            factor = factor / np.sinc(order / count) ** (degree + 1)
            if count % 2 == 0:
                factor[np.abs(order) == count // 2] = 0.0  # the Nyquist term has no partner
            spread = [1, 1, 1]
            spread[axis] = order.size
            spectrum = np.take(spectrum, order % full[axis], axis=axis) * factor.reshape(spread)
        return np.asarray(spectrum)


@dataclass(frozen=True)
class _SynthesisGrid:
    """Spline grid: `shape` points of `step_mm`; the reference split into `split` parts a voxel, padded to `full`."""

    shape: tuple[int, int, int]
    full: tuple[int, int, int]
    split: tuple[int, int, int]
    step_mm: NDArray[np.float64]

    @property
    def frequencies(self) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
        """Angular frequencies along the three axes, per mm, shaped to broadcast."""
        x, y, z = self.shape
        return (
            2.0 * np.pi * fft.fftfreq(x, self.step_mm[0])[:, None, None],
            2.0 * np.pi * fft.fftfreq(y, self.step_mm[1])[None, :, None],
            2.0 * np.pi * fft.rfftfreq(z, self.step_mm[2])[None, None, :],
        )


def _bounds(used: NDArray[np.bool_]) -> tuple[int, int]:
    where = np.flatnonzero(used)
    return int(where[0]), int(where[-1]) + 1


def _open_faces(values: NDArray[np.float64], level: float) -> tuple[tuple[int, int], ...]:
    """Faces (axis, −1 or 1) of the array that cut through the object: what lies beyond them is not known."""
    faces = []
    for axis in range(3):
        for side, index in ((-1, 0), (1, -1)):
            face = np.take(values, index, axis=axis)
            # Two percent of the level over a hundredth of the face: single stray voxels do not cut an object.
            if float(np.mean(face > 0.02 * level)) > 0.01:
                faces.append((axis, side))
    return tuple(faces)
