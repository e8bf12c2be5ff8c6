"""The blurred cylinder's model and its joint fit: wall, ends, tilt, and slow nuisance terms.

The wall is a disc blurred by the Gaussian's covariance projected along the axis; an end is an error function of the
position along the axis. Voxels where a tilted wall and an end meet are left out: there the product of both is not the
exact convolution.
"""

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtr

from evenblur.phantoms.cylinder_start import Placed, Start, grid_points, place
from evenblur.phantoms.disc import DiscTable
from evenblur.phantoms.fitting import Fitted, least_squares

NAMES = (
    "centre_x", "centre_y", "slope_x", "slope_y", "radius", "sigma", "sigma_z", "inside", "outside",
    "cupping", "gain_x", "gain_y", "gain_z", "outside_slope",
)  # fmt: skip
PER_END = ("position", "inside", "outside")
SIGMA, SIGMA_Z, RADIUS = NAMES.index("sigma"), NAMES.index("sigma_z"), NAMES.index("radius")
WALL, FIRST_END, SECOND_END = 0, 1, 2
REACH = 4.5
"""How many sigmas from an edge the voxels are all used."""
_ENOUGH = 12_000
MOST_VOXELS = 60_000
"""Neighbouring voxels tell nearly the same: beyond this number a large image is thinned, which costs no precision."""
PRIOR_SPREAD = 0.4
"""Spread of ln(sigma_z / sigma) across scanners: what is known of the axial width where the image does not tell it."""


@dataclass(frozen=True)
class Sample:
    """The voxels that enter the fit: values, positions (3, n; mm), group, and index in the flattened image."""

    values: NDArray[np.float64]
    points: NDArray[np.float64]
    group: NDArray[np.int64]
    index: NDArray[np.intp]
    middle_mm: float
    half_mm: float
    ends: tuple[bool, bool]

    def every(self, step: int) -> "Sample":
        """One of `step` voxels, drawn the same way each time; in a fixed order, so that sums repeat."""
        chosen = np.random.default_rng(0).permutation(self.values.size)[:: max(step, 1)]
        chosen.sort()
        return replace(
            self,
            values=self.values[chosen],
            points=self.points[:, chosen],
            group=self.group[chosen],
            index=self.index[chosen],
        )

    def end_column(self, which: int) -> int:
        """First column of an end's three parameters."""
        return len(NAMES) + (len(PER_END) if which == 1 and self.ends[0] else 0)


@dataclass(frozen=True)
class CylinderFit:
    """Optimum with its sample and the voxels' places in the cylinder's own coordinates."""

    fitted: Fitted
    sample: Sample
    placed: Placed
    disc: NDArray[np.float64]
    sigma_normal: NDArray[np.float64]

    def value(self, name: str) -> float:
        """A common parameter by its name (mm, or the image's unit)."""
        return float(self.fitted.parameters[NAMES.index(name)])

    def end(self, which: int, name: str) -> float | None:
        """An end's parameter by its name; None for an end that was not fitted."""
        if not self.sample.ends[which]:
            return None
        return float(self.fitted.parameters[self.sample.end_column(which) + PER_END.index(name)])


def fit_cylinder(
    volume: NDArray[np.float64],
    *,
    voxel_mm: tuple[float, float, float],
    start: Start,
    use_prior: bool,
    needs_end: bool = False,
) -> CylinderFit | None:
    """Fit the cylinder, choosing the voxels anew until the widths no longer change the choice.

    Parameters
    ----------
    volume
        Image, shape (x, y, z).
    voxel_mm
        Voxel sizes, mm.
    start
        From `find_cylinder`.
    use_prior
        Hold the axial sigma near the in-plane one, for images where only a faint tilt tells it.
    needs_end
        Give up (None) if no end lies well inside the field.

    Returns
    -------
    CylinderFit or None
    """
    parameters = np.array(
        [*start.centre_mm, *start.slope, start.radius_mm, start.sigma_mm, start.sigma_mm, start.inside, start.outside,
         0.0, 0.0, 0.0, 0.0, 0.0]
    )  # fmt: skip
    ends = start.ends_mm
    result: CylinderFit | None = None
    thinned = True
    for _ in range(6):
        sample = choose_voxels(volume, voxel_mm=voxel_mm, start=start, parameters=parameters, ends=ends)
        if needs_end and not any(sample.ends):
            return None
        if sample.values.size > MOST_VOXELS:
            sample = sample.every(int(np.ceil(sample.values.size / MOST_VOXELS)))
        # A few thousand voxels lead to the neighbourhood of the optimum; only the last steps need them all.
        thinned = thinned and sample.values.size > 4 * _ENOUGH
        used = sample.every(sample.values.size // _ENOUGH) if thinned else sample
        first = [parameters]
        for which in (0, 1):
            end = ends[which]
            if sample.ends[which] and end is not None:
                first.append(np.array([end, parameters[NAMES.index("inside")], parameters[NAMES.index("outside")]]))
        result = _fit_sample(used, np.concatenate(first), volume.shape, voxel_mm, use_prior)
        before, parameters = parameters, result.fitted.parameters[: len(NAMES)]
        ends = (
            result.end(0, "position") if sample.ends[0] else ends[0],
            result.end(1, "position") if sample.ends[1] else ends[1],
        )
        change = np.abs(parameters[[SIGMA, SIGMA_Z]] / before[[SIGMA, SIGMA_Z]] - 1.0)
        if not thinned and np.all(change < 0.1):
            break
        thinned = thinned and bool(np.any(change > 0.1))
    assert result is not None
    return result


def choose_voxels(
    volume: NDArray[np.float64],
    *,
    voxel_mm: tuple[float, float, float],
    start: Start,
    parameters: NDArray[np.float64],
    ends: tuple[float | None, float | None],
) -> Sample:
    """All voxels near an edge, and one of eight of the flat parts; none where another object stands."""
    centre_x, centre_y, slope_x, slope_y, radius, sigma, sigma_z = parameters[:7]
    points = grid_points(volume.shape, voxel_mm)
    placed = place(points, centre_mm=(centre_x, centre_y), slope=(slope_x, slope_y), middle_mm=start.middle_mm)
    rho, along, axis_z = placed.rho, placed.along, placed.axis[2]
    across = np.sqrt(sigma**2 * axis_z**2 + sigma_z**2 * (1.0 - axis_z**2))
    sigma_along = np.sqrt(sigma_z**2 * axis_z**2 + sigma**2 * (1.0 - axis_z**2))
    inner = max(radius - REACH * across, 0.6 * radius)
    low = -np.inf if ends[0] is None else ends[0]
    high = np.inf if ends[1] is None else ends[1]
    span = min(high, float(along.max())) - max(low, float(along.min()))
    margin = min(REACH * sigma_along, 0.3 * span)
    middle_part = (along > low + margin) & (along < high - margin)
    even = [np.arange(n) % 2 == 0 for n in volume.shape]
    thin = even[0][:, None, None] & even[1][None, :, None] & (even[2] | (volume.shape[2] < 12))
    outermost = radius + 7.0 * across + 2.0 * max(voxel_mm[:2])
    wall = middle_part & (rho < outermost) & (thin | (np.abs(rho - radius) < REACH * across))
    group = np.full(volume.shape, -1, dtype=np.int64)
    group[wall] = WALL
    seen = []
    for which, end in enumerate(ends):
        if end is None:
            seen.append(False)
            continue
        outward = (along - end) * (1 if which else -1)
        near = (np.abs(outward) < 1.4 * REACH * sigma_along) & (rho < inner)
        near &= (along < 0.5 * (low + high)) if which == 0 else (along > 0.5 * (low + high))
        beyond = np.count_nonzero(near & (outward > 0.7 * sigma_along)) * np.prod(voxel_mm)
        ok = bool(beyond > 0.6 * sigma_along * np.pi * inner**2)
        seen.append(ok)
        group[near] = (FIRST_END if which == 0 else SECOND_END) if ok else -1
    if start.others is not None:
        group[start.others] = -1
    index = np.flatnonzero(group.ravel() >= 0)
    where = np.unravel_index(index, volume.shape)
    mm = np.stack([w * step for w, step in zip(where, voxel_mm, strict=True)])
    chosen = group.ravel()[index]
    half = 0.5 * max(float(np.ptp(along.ravel()[index])), voxel_mm[2])
    return Sample(volume.ravel()[index], mm, chosen, index, start.middle_mm, half, (seen[0], seen[1]))


def _fit_sample(
    sample: Sample,
    first: NDArray[np.float64],
    shape: tuple[int, ...],
    voxel_mm: tuple[float, float, float],
    use_prior: bool,
) -> CylinderFit:
    fixed = [2, 3, NAMES.index("gain_z")] if shape[2] < 3 else []
    free = np.array([k for k in range(first.size) if k not in fixed])
    contrast = abs(first[NAMES.index("inside")] - first[NAMES.index("outside")])
    weight = 0.0

    def full(reduced: NDArray[np.float64]) -> NDArray[np.float64]:
        everything = first.copy()
        everything[free] = reduced
        return everything

    def model(reduced: NDArray[np.float64]) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        p = full(reduced)
        prediction, jacobian, *_ = evaluate(p, sample, rows=1 if use_prior else 0)
        residuals = sample.values - prediction
        if not use_prior:
            return residuals, _columns(jacobian, free)
        jacobian[-1, SIGMA_Z], jacobian[-1, SIGMA] = weight / p[SIGMA_Z], -weight / p[SIGMA]
        miss = -weight * np.log(p[SIGMA_Z] / p[SIGMA])
        return np.append(residuals, miss), _columns(jacobian, free)

    lower, upper = np.full(first.size, -np.inf), np.full(first.size, np.inf)
    lower[[SIGMA, SIGMA_Z]] = 0.1 * min(voxel_mm)
    upper[[SIGMA, SIGMA_Z]] = first[RADIUS]
    lower[RADIUS] = max(voxel_mm[:2])
    if use_prior:
        residuals = sample.values - evaluate(first, sample)[0]
        # The first residuals hold the misfit of the start; never let the prior weigh more than 5 % noise would.
        noise = min(1.4826 * float(np.median(np.abs(residuals))), 0.05 * contrast)
        weight = max(noise, 1e-4 * contrast) / PRIOR_SPREAD
    fitted = least_squares(model, first[free], lower=lower[free], upper=upper[free])
    parameters = full(fitted.parameters)
    columns = np.zeros((fitted.residuals.size, first.size))
    columns[:, free] = fitted.jacobian
    _, _, placed, disc, sigma_normal = evaluate(parameters, sample)
    columns = fitted.jacobian if free.size == first.size else columns
    whole = replace(fitted, parameters=parameters, jacobian=columns)
    return CylinderFit(whole, sample, placed, disc, sigma_normal)


def _columns(jacobian: NDArray[np.float64], free: NDArray[np.intp]) -> NDArray[np.float64]:
    return jacobian if free.size == jacobian.shape[1] else jacobian[:, free]


def evaluate(  # noqa: PLR0915 - one formula after the other; parts would only pass the same dozen arrays on
    parameters: NDArray[np.float64], sample: Sample, *, rows: int = 0
) -> tuple[NDArray[np.float64], NDArray[np.float64], Placed, NDArray[np.float64], NDArray[np.float64]]:
    """The model's values (n,), its Jacobian (n + rows of zeros, parameters), the voxels' places.

    Then the wall's profile, and the sigma across the wall, at each voxel.
    """
    (cx, cy, tx, ty, radius, sigma, sigma_z, inside, outside, cup, gain_x, gain_y, gain_z, outer) = parameters[:14]
    points = (sample.points[0], sample.points[1], sample.points[2])
    placed = place(points, centre_mm=(cx, cy), slope=(tx, ty), middle_mm=sample.middle_mm)
    rho, along, normal, axis = placed.rho, placed.along, placed.normal, placed.axis
    length = 1.0 / axis[2]
    normal_z2 = normal[2] ** 2
    tangent_z2 = (axis[0] * normal[1] - axis[1] * normal[0]) ** 2
    tilted = 1.0 - axis[2] ** 2 > 1e-12
    sigma_normal: NDArray[np.float64] | float
    if tilted:
        sigma_normal = np.sqrt(sigma**2 * (1.0 - normal_z2) + sigma_z**2 * normal_z2)
        # A tangential sigma other than the normal one moves the wall by half the variances' difference over R.
        apparent = radius - (sigma_z**2 - sigma**2) * (tangent_z2 - normal_z2) / (2.0 * radius)
        low, high = float(np.min(sigma_normal)), float(np.max(sigma_normal))
    else:
        sigma_normal, apparent, low, high = sigma, np.full_like(rho, radius), sigma, sigma
    table = DiscTable.build(radius_mm=radius, sigma_low_mm=low, sigma_high_mm=high)
    disc, by_rho, by_sigma, by_radius = table.evaluate(rho, sigma_normal, apparent if tilted else radius)

    u, v = rho * normal[0], rho * normal[1]
    relative = (rho / radius) ** 2 - 1.0
    gain = 1.0 + cup * relative + (gain_x * u + gain_y * v) / radius + gain_z * along / sample.half_mm
    level_in = np.full(rho.size, inside)
    level_out = np.full(rho.size, outside)
    sigma_along = np.sqrt(sigma_z**2 * axis[2] ** 2 + sigma**2 * (1.0 - axis[2] ** 2))
    edge, edge_slope, edge_sigma = np.ones(rho.size), np.zeros(rho.size), np.zeros(rho.size)
    densities: list[NDArray[np.float64] | None] = []
    for which in (0, 1):
        if not sample.ends[which]:
            densities.append(None)
            continue
        column, sign = sample.end_column(which), 1.0 if which else -1.0
        mine = sample.group == which + 1
        level_in[mine], level_out[mine] = parameters[column + 1 : column + 3]
        t = sign * (parameters[column] - along) / sigma_along
        edge -= ndtr(-t)
        density = np.exp(-0.5 * t**2) / (np.sqrt(2.0 * np.pi) * sigma_along)
        edge_slope -= sign * density
        edge_sigma -= t * density
        densities.append(sign * density)
    contrast = level_in * gain - level_out
    shape = disc * edge
    beyond = (1.0 - disc) * (rho - radius) / radius
    values = level_out + outer * beyond + contrast * shape

    whole = np.zeros((rho.size + rows, parameters.size), order="F")
    jacobian = whole[: rho.size]
    pull = contrast * edge - outer * (rho - radius) / radius  # derivative of the value by the wall's profile
    to_rho = pull * by_rho
    to_along = contrast * disc * edge_slope
    jacobian[:, 0] = -to_rho * normal[0] - to_along * axis[0]
    jacobian[:, 1] = -to_rho * normal[1] - to_along * axis[1]
    jacobian[:, 2] = (-to_rho * along * normal[0] + to_along * u) / length
    jacobian[:, 3] = (-to_rho * along * normal[1] + to_along * v) / length
    spread = tangent_z2 - normal_z2
    jacobian[:, RADIUS] = pull * by_radius
    jacobian[:, SIGMA] = pull * (
        by_sigma * (sigma / sigma_normal) * (1.0 - normal_z2) + by_radius * sigma * spread / radius
    )
    jacobian[:, SIGMA_Z] = pull * (
        by_sigma * (sigma_z / sigma_normal) * normal_z2 - by_radius * sigma_z * spread / radius
    )
    to_sigma_along = contrast * disc * edge_sigma
    jacobian[:, SIGMA] += to_sigma_along * sigma * (1.0 - axis[2] ** 2) / sigma_along
    jacobian[:, SIGMA_Z] += to_sigma_along * sigma_z * axis[2] ** 2 / sigma_along
    wall = sample.group == WALL
    jacobian[:, 7] = np.where(wall, gain * shape, 0.0)
    jacobian[:, 8] = np.where(wall, 1.0 - shape, 0.0)
    lit = level_in * shape
    jacobian[:, 9] = lit * relative
    jacobian[:, 10] = lit * u / radius
    jacobian[:, 11] = lit * v / radius
    jacobian[:, 12] = lit * along / sample.half_mm
    jacobian[:, 13] = beyond
    for which, density in enumerate(densities):
        if density is None:
            continue
        column, mine = sample.end_column(which), sample.group == which + 1
        jacobian[:, column] = contrast * disc * density
        jacobian[:, column + 1] = np.where(mine, gain * shape, 0.0)
        jacobian[:, column + 2] = np.where(mine, 1.0 - shape, 0.0)
    return values, whole, placed, disc, np.broadcast_to(sigma_normal, rho.shape)
