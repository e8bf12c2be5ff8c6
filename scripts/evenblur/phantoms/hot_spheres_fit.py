"""Least-squares fit of hot spheres in a background: one in-plane and one axial width shared by all of them.

Each sphere is a ball of the hot level in a cold shell (its wall) in a background of its own level. With b(R) the
blurred ball of radius R about the sphere's centre, the image near it is

    background · (1 − b(R + wall)) + hot · b(R),

and neighbours add their own hot · b(R) − background · b(R + wall).
"""

from collections.abc import Sequence
from dataclasses import dataclass, field
from math import ceil

import numpy as np
from numpy.typing import NDArray

from evenblur.phantoms.blurred_sphere import blurred_ball, blurred_ball_with_derivatives

Array = NDArray[np.float64]
Index = NDArray[np.intp]

SHARED = 3
"""Parameters that all spheres share: in-plane sigma (mm), axial sigma (mm), hot level."""

EACH = 4
"""Parameters of each sphere: x, y, z of its centre (mm from the centre of voxel 0, 0, 0), background level."""

_MARGIN_FWHM = 1.5  # the window reaches this far beyond the wall: there the blurred edge is below 0.1 % of its height
_REACH_SIGMA = 5.0  # a sphere is felt this far beyond its wall, and no farther than 3e-7 of its height
_MOST_VOXELS = 120_000  # beyond it the fit takes every second, third ... voxel: neighbours tell the same there
_SMALLEST_SIGMA_VOXELS = 0.1
_LARGEST_SIGMA_MM = 25.0
_STEPS = 60
_SETTLED = 1e-8
_PADDING_MM = 2.0  # how far a centre may wander from its start before its lattice would have to grow


@dataclass(frozen=True)
class Sphere:
    """A sphere to be fitted: its inner radius and the start of its centre (mm)."""

    radius_mm: float
    centre_mm: tuple[float, float, float]


@dataclass(frozen=True)
class Voxels:
    """The voxels that a fit uses: lattice indices, shape (n, 3), and the sphere that each belongs to, shape (n,)."""

    index: Index
    owner: Index


@dataclass(frozen=True)
class SphereFit:
    """A finished fit: parameters (`SHARED` shared ones, then `EACH` for each sphere), residuals and Jacobian."""

    parameters: Array
    residuals: Array
    jacobian: Array
    settled: bool

    @property
    def sigma_in_plane_mm(self) -> float:
        """Shared in-plane sigma, mm."""
        return float(self.parameters[0])

    @property
    def sigma_axial_mm(self) -> float:
        """Shared axial sigma, mm."""
        return float(self.parameters[1])

    @property
    def hot(self) -> float:
        """Shared level of the hot filling, in the image's units."""
        return float(self.parameters[2])

    def centre_mm(self, sphere: int) -> Array:
        """Centre of a sphere (x, y, axial), mm."""
        start = SHARED + EACH * sphere
        return self.parameters[start : start + 3]

    def background(self, sphere: int) -> float:
        """Background level about a sphere, in the image's units."""
        return float(self.parameters[SHARED + EACH * sphere + 3])


def choose_voxels(
    shape: tuple[int, int, int],
    *,
    voxel_mm: tuple[float, float, float],
    spheres: Sequence[Sphere],
    wall_mm: float,
    fwhm_in_plane_mm: float,
    fwhm_axial_mm: float,
    excluded: NDArray[np.bool_] | None = None,
) -> Voxels:
    """Voxels within 1.5 widths of a sphere's wall, each given to the sphere whose surface is nearest.

    `excluded` (shape of the volume) marks voxels of other objects, which no sphere's window takes in.

    >>> one = [Sphere(5.0, (10.0, 10.0, 10.0))]
    >>> chosen = choose_voxels((11, 11, 11), voxel_mm=(2.0, 2.0, 2.0), spheres=one, wall_mm=1.0,
    ...                        fwhm_in_plane_mm=2.0, fwhm_axial_mm=2.0)
    >>> bool(np.all(np.linalg.norm(chosen.index * 2.0 - 10.0, axis=1) <= 9.0))
    True
    """
    nearest = np.full(shape, np.inf, dtype=np.float32)
    owner = np.full(shape, -1, dtype=np.int16)
    widths = np.array([fwhm_in_plane_mm, fwhm_in_plane_mm, fwhm_axial_mm])
    for number, sphere in enumerate(spheres):
        semi_axes = sphere.radius_mm + wall_mm + _MARGIN_FWHM * widths
        box, axes = _lattice(shape, voxel_mm=voxel_mm, centre_mm=np.array(sphere.centre_mm), half_mm=semi_axes)
        x, y, z = (axis / half for axis, half in zip(axes, semi_axes, strict=True))
        ellipsoid = x[:, None, None] ** 2 + y[:, None] ** 2 + z**2
        distance = np.sqrt(axes[0][:, None, None] ** 2 + axes[1][:, None] ** 2 + axes[2] ** 2) - sphere.radius_mm
        taken = (ellipsoid <= 1.0) & (distance < nearest[box])
        nearest[box][taken] = distance[taken]
        owner[box][taken] = number
    if excluded is not None:
        owner[excluded] = -1
    index = np.argwhere(owner >= 0)
    if len(index) > _MOST_VOXELS:
        index = _thinned(index, voxel_mm=voxel_mm)
    return Voxels(index, owner[tuple(index.T)].astype(np.intp))


def _thinned(index: Index, *, voxel_mm: tuple[float, float, float]) -> Index:
    """Every second, third ... voxel along the axis whose voxels lie closest, until few enough are left."""
    stride = np.ones(3, dtype=np.intp)
    kept = index
    while len(kept) > _MOST_VOXELS:
        stride[np.argmin(stride * np.array(voxel_mm))] += 1
        kept = index[np.all(index % stride == 0, axis=1)]
    return kept


def _lattice(
    shape: tuple[int, int, int], *, voxel_mm: tuple[float, float, float], centre_mm: Array, half_mm: Array
) -> tuple[tuple[slice, slice, slice], tuple[Array, Array, Array]]:
    """The box of voxels within `half_mm` of a centre, and its planes' coordinates from that centre."""
    slices, axes = [], []
    for count, step, centre, half in zip(shape, voxel_mm, centre_mm, half_mm, strict=True):
        low = min(max(ceil((centre - half) / step), 0), count)
        high = max(min(int((centre + half) // step) + 1, count), low)
        slices.append(slice(low, high))
        axes.append(np.arange(low, high) * step - centre)
    return (slices[0], slices[1], slices[2]), (axes[0], axes[1], axes[2])


@dataclass
class SphereModel:
    """The model's values and derivatives at chosen voxels."""

    shape: tuple[int, int, int]
    voxel_mm: tuple[float, float, float]
    spheres: Sequence[Sphere]
    wall_mm: float
    voxels: Voxels
    reach_sigma_mm: tuple[float, float]
    _boxes: list[tuple[tuple[slice, slice, slice], Index, tuple[Index, Index, Index]]] = field(default_factory=list)

    def __post_init__(self) -> None:
        sigmas = np.array([self.reach_sigma_mm[0], self.reach_sigma_mm[0], self.reach_sigma_mm[1]])
        for sphere in self.spheres:
            half = sphere.radius_mm + self.wall_mm + _REACH_SIGMA * sigmas + _PADDING_MM
            box, _ = _lattice(self.shape, voxel_mm=self.voxel_mm, centre_mm=np.array(sphere.centre_mm), half_mm=half)
            low, high = np.array([s.start for s in box]), np.array([s.stop for s in box])
            inside = np.flatnonzero(np.all((self.voxels.index >= low) & (self.voxels.index < high), axis=1))
            x, y, z = (self.voxels.index[inside] - low).T
            self._boxes.append((box, inside, (x, y, z)))

    @property
    def parameter_count(self) -> int:
        """Number of fitted parameters."""
        return SHARED + EACH * len(self.spheres)

    def _axes(self, box: tuple[slice, slice, slice], centre: Array) -> tuple[Array, Array, Array]:
        x, y, z = (np.arange(s.start, s.stop) * step - c for s, step, c in zip(box, self.voxel_mm, centre, strict=True))
        return x, y, z

    def values(self, parameters: Array) -> Array:
        """Model at the voxels, shape (n,)."""
        sp, sz, hot = parameters[:SHARED]
        each = parameters[SHARED:].reshape(-1, EACH)
        model: Array = each[self.voxels.owner, 3].copy()
        for sphere, (x, y, z, background), (box, inside, at) in zip(self.spheres, each, self._boxes, strict=True):
            axes = self._axes(box, np.array([x, y, z]))
            inner = blurred_ball(*axes, radius_mm=sphere.radius_mm, sigma_in_plane_mm=sp, sigma_axial_mm=sz)
            outer = inner
            if self.wall_mm > 0:
                radius = sphere.radius_mm + self.wall_mm
                outer = blurred_ball(*axes, radius_mm=radius, sigma_in_plane_mm=sp, sigma_axial_mm=sz)
            model[inside] += hot * inner[at] - background * outer[at]
        return model

    def values_and_jacobian(self, parameters: Array) -> tuple[Array, Array]:
        """Model at the voxels, shape (n,), and its derivative by the parameters, shape (n, parameters)."""
        sp, sz, hot = parameters[:SHARED]
        each = parameters[SHARED:].reshape(-1, EACH)
        model: Array = each[self.voxels.owner, 3].copy()
        jacobian = np.zeros((model.size, self.parameter_count))
        jacobian[np.arange(model.size), SHARED + EACH * self.voxels.owner + 3] = 1.0
        for number, (sphere, (box, inside, at)) in enumerate(zip(self.spheres, self._boxes, strict=True)):
            background = each[number, 3]
            axes = self._axes(box, each[number, :3])
            inner = blurred_ball_with_derivatives(
                *axes, radius_mm=sphere.radius_mm, sigma_in_plane_mm=sp, sigma_axial_mm=sz
            )
            outer = inner
            if self.wall_mm > 0:
                outer = blurred_ball_with_derivatives(
                    *axes, radius_mm=sphere.radius_mm + self.wall_mm, sigma_in_plane_mm=sp, sigma_axial_mm=sz
                )
            model[inside] += hot * inner.value[at] - background * outer.value[at]
            jacobian[inside, 0] += (hot * inner.by_sigma_in_plane - background * outer.by_sigma_in_plane)[at]
            jacobian[inside, 1] += (hot * inner.by_sigma_axial - background * outer.by_sigma_axial)[at]
            jacobian[inside, 2] += inner.value[at]
            start = SHARED + EACH * number
            for offset, name in enumerate(("by_x", "by_y", "by_z")):
                slope = hot * getattr(inner, name) - background * getattr(outer, name)
                jacobian[inside, start + offset] = -slope[at]
            jacobian[inside, start + 3] -= outer.value[at]
        return model, jacobian


def fit_spheres(data: Array, *, model: SphereModel, start: Array, tolerance: float = _SETTLED) -> SphereFit:
    """Fit the model to data at its voxels by damped Gauss-Newton steps (Levenberg and Marquardt's method).

    Parameters
    ----------
    data
        Values at `model.voxels`, shape (n,).
    model
        What to fit.
    start
        Starting parameters, shape (parameters,).
    tolerance
        Relative fall of the sum of squares below which the fit has settled.

    Returns
    -------
    SphereFit
        `settled` is False where the sum of squares still fell when the steps ran out.

    Raises
    ------
    ValueError
        If there are fewer voxels than parameters.

    >>> one = Sphere(8.0, (20.0, 20.0, 20.0))
    >>> grid = dict(voxel_mm=(2.0, 2.0, 2.0), spheres=[one], wall_mm=0.0)
    >>> chosen = choose_voxels((21, 21, 21), fwhm_in_plane_mm=6.0, fwhm_axial_mm=6.0, **grid)
    >>> model = SphereModel((21, 21, 21), voxels=chosen, reach_sigma_mm=(3.0, 3.0), **grid)
    >>> truth = np.array([2.5, 2.0, 4.0, 20.3, 19.8, 20.0, 1.0])
    >>> fit = fit_spheres(model.values(truth), model=model, start=np.array([3.0, 3.0, 3.0, 20.0, 20.0, 20.0, 0.5]))
    >>> bool(np.allclose(fit.parameters, truth, atol=1e-4))
    True
    """
    if data.size < model.parameter_count:
        raise ValueError(f"{data.size} voxels cannot fix {model.parameter_count} parameters")
    low = _SMALLEST_SIGMA_VOXELS * min(model.voxel_mm)
    parameters = start.astype(np.float64).copy()
    parameters[:2] = np.clip(parameters[:2], low, _LARGEST_SIGMA_MM)
    damping = 1e-3
    settled = False
    values, jacobian = model.values_and_jacobian(parameters)
    residuals = data - values
    squares = float(residuals @ residuals)
    for _ in range(_STEPS):
        normal, gradient = jacobian.T @ jacobian, jacobian.T @ residuals
        diagonal = np.maximum(np.diag(normal), 1e-12 * np.max(np.diag(normal)))
        better = False
        while damping < 1e8:
            step = np.linalg.solve(normal + np.diag(damping * diagonal), gradient)
            trial = parameters + step
            trial[:2] = np.clip(trial[:2], low, _LARGEST_SIGMA_MM)
            trial_residuals = data - model.values(trial)
            trial_squares = float(trial_residuals @ trial_residuals)
            if trial_squares < squares:
                better = True
                break
            if squares - trial_squares > -1e-12 * squares:
                break
            damping *= 10.0
        if not better:
            settled = True
            break
        fall = (squares - trial_squares) / squares
        parameters, squares = trial, trial_squares
        damping = max(damping / 10.0, 1e-9)
        values, jacobian = model.values_and_jacobian(parameters)
        residuals = data - values
        # A noise-free fit falls to rounding: its relative fall never settles, its size does.
        if fall < tolerance or squares <= 1e-20 * float(data @ data):
            settled = True
            break
    return SphereFit(parameters, residuals, jacobian, settled)


def without_spheres(
    volume: Array,
    *,
    voxel_mm: tuple[float, float, float],
    spheres: Sequence[Sphere],
    wall_mm: float,
    fit: SphereFit,
) -> Array:
    """The image with the fitted spheres taken away and the background that they displace put back, shape (x, y, z)."""
    rest = volume.copy()
    sigmas = np.array([fit.sigma_in_plane_mm, fit.sigma_in_plane_mm, fit.sigma_axial_mm])
    sp, sz = fit.sigma_in_plane_mm, fit.sigma_axial_mm
    for number, sphere in enumerate(spheres):
        outer = sphere.radius_mm + wall_mm
        box, axes = _lattice(
            volume.shape, voxel_mm=voxel_mm, centre_mm=fit.centre_mm(number), half_mm=outer + _REACH_SIGMA * sigmas
        )
        rest[box] -= fit.hot * blurred_ball(*axes, radius_mm=sphere.radius_mm, sigma_in_plane_mm=sp, sigma_axial_mm=sz)
        rest[box] += fit.background(number) * blurred_ball(
            *axes, radius_mm=outer, sigma_in_plane_mm=sp, sigma_axial_mm=sz
        )
    return rest
