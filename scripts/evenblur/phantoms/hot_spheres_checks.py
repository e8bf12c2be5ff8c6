"""What a finished fit of hot spheres is asked before it is believed: blocks for the jackknife, residuals, halves."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from evenblur.phantoms.base import Flag
from evenblur.phantoms.hot_spheres_fit import EACH, SHARED, Sphere, SphereFit, Voxels
from evenblur.statistics import Jackknife, block_jackknife, shortfall, two_halves
from evenblur.widths import FWHM_PER_SIGMA, sigma_from_fwhm

Array = NDArray[np.float64]

_NARROWEST_BLOCK_MM = 12.0
_WIDEST_BLOCK_MM = 18.0
_BLOCKS_OF_A_SPHERE = (16, 8, 4, 2, 1)
_ANCHOR = 1e-3
_BLOCKS_TO_SPEAK = 5
_SIGNIFICANT = 3.5  # standard errors


@dataclass(frozen=True)
class RadialResiduals:
    """Residuals of all spheres against the distance from their surfaces, as shares of hot level minus background.

    Lists of one length: distance of the bin (mm, negative inside), mean residual, its standard error between blocks,
    mean measured excess over the hot level (bins inside the largest sphere only; NaN elsewhere).
    """

    distance_mm: Array
    residual: Array
    se: Array
    excess: Array

    @property
    def rms(self) -> float:
        """Root mean square residual, less what noise alone would give."""
        if not self.residual.size:
            return 0.0
        return float(np.sqrt(max(float(np.mean(self.residual**2 - self.se**2)), 0.0)))

    @property
    def strongest(self) -> float:
        """The largest mean residual in standard errors."""
        return float(np.max(np.abs(self.residual) / self.se)) if self.residual.size else 0.0


def noise_fwhm_mm(residuals: Array, *, voxels: Voxels, voxel_mm: tuple[float, float, float]) -> float:
    """Width (mm) of the filter that would give white noise the residuals' correlation between neighbouring voxels.

    The largest over the axes; 0 where neighbours are not correlated. FWHM = voxel · sqrt(−2 ln 2 / ln rho), rho the
    correlation of neighbours (the smoothness estimate of statistical image analysis).
    """
    low = voxels.index.min(axis=0)
    box = np.full(voxels.index.max(axis=0) - low + 1, np.nan)
    box[tuple((voxels.index - low).T)] = residuals
    widest = 0.0
    for axis, step in enumerate(voxel_mm):
        first = np.moveaxis(box, axis, 0)[:-1]
        second = np.moveaxis(box, axis, 0)[1:]
        both = np.isfinite(first) & np.isfinite(second)
        power = np.sum(first[both] ** 2 + second[both] ** 2)
        if power <= 0:
            continue
        rho = min(2.0 * float(np.sum(first[both] * second[both]) / power), 0.999)
        if rho > 0:
            widest = max(widest, step * float(np.sqrt(-2.0 * np.log(2.0) / np.log(rho))))
    return widest


def _block_width_mm(noise_mm: float) -> float:
    return min(max(_NARROWEST_BLOCK_MM, 2.0 * noise_mm), _WIDEST_BLOCK_MM)


def _sectors(sphere: Sphere, fit: SphereFit, width_mm: float) -> tuple[int, float]:
    """Number of sectors of a sphere, and the width (mm) of each where the sphere speaks for the width."""
    fwhm = FWHM_PER_SIGMA * max(fit.sigma_in_plane_mm, fit.sigma_axial_mm)
    surface = 4.0 * np.pi * max(sphere.radius_mm - fwhm / 2.0, 0.0) ** 2
    count = next(n for n in _BLOCKS_OF_A_SPHERE if n == 1 or surface / n >= width_mm**2)
    return count, float(np.sqrt(surface / count))


def sphere_blocks(
    voxels: Voxels, *, voxel_mm: tuple[float, float, float], spheres: Sequence[Sphere], fit: SphereFit, noise_mm: float
) -> NDArray[np.int64]:
    """Block of each voxel: sectors about each sphere's centre, each wider than the noise's correlation.

    A block's width is the square root of the surface that falls into it, half a width inside the sphere's own (what
    speaks for the width lies from there outwards): at least 12 mm and twice the noise's filter width. The core, where
    all sectors would meet, is a block of its own; small spheres are one block altogether. Neighbouring sectors get
    labels of unlike parity, so that two halves by alternate labels form a chequered pattern.
    """
    width = _block_width_mm(noise_mm)
    offsets = voxels.index * np.array(voxel_mm)
    labels = np.zeros(len(offsets), dtype=np.int64)
    for number, sphere in enumerate(spheres):
        count, _ = _sectors(sphere, fit, width)
        mine = voxels.owner == number
        x, y, z = (offsets[mine] - fit.centre_mm(number)).T
        sectors = max(count // 2, 1) if count > 2 else count
        azimuth = np.floor((np.arctan2(y, x) / (2.0 * np.pi) + 0.5) * sectors).astype(np.int64) % sectors
        sector = azimuth
        if count > 2:
            sector = 2 * azimuth + ((z > 0).astype(np.int64) + azimuth) % 2
        if count > 1:
            sector[x**2 + y**2 + z**2 < (width / 2.0) ** 2] = count
        labels[mine] = (_BLOCKS_OF_A_SPHERE[0] + 1) * number + sector
    return labels


def radial_residuals(
    data: Array,
    *,
    voxels: Voxels,
    voxel_mm: tuple[float, float, float],
    spheres: Sequence[Sphere],
    fit: SphereFit,
    blocks: NDArray[np.int64],
) -> RadialResiduals:
    """Mean residuals in shells about the spheres' surfaces, with standard errors from the spread between blocks."""
    fwhm = FWHM_PER_SIGMA * max(fit.sigma_in_plane_mm, fit.sigma_axial_mm)
    shell = max(fwhm / 5.0, min(voxel_mm))
    centres = np.array([fit.centre_mm(k) for k in range(len(spheres))])
    radii = np.array([sphere.radius_mm for sphere in spheres])
    levels = fit.hot - np.array([fit.background(k) for k in range(len(spheres))])
    distance = np.linalg.norm(voxels.index * np.array(voxel_mm) - centres[voxels.owner], axis=1) - radii[voxels.owner]
    share = fit.residuals / levels[voxels.owner]
    excess = (data - fit.hot) / levels[voxels.owner]
    largest = voxels.owner == int(np.argmax(radii))
    bins = np.round(distance / shell).astype(np.int64)
    kept = []
    for k in np.unique(bins[distance <= 1.2 * fwhm]):
        here = bins == k
        _, which = np.unique(blocks[here], return_inverse=True)
        count = np.bincount(which)
        if count.size < 6:
            continue
        mean = float(share[here].mean())
        # Blocks weigh by their voxels: the error of a ratio of sums.
        spread = np.bincount(which, weights=share[here] - mean)
        se = float(np.sqrt(np.sum(spread**2) * count.size / (count.size - 1)) / count.sum())
        inner = here & largest
        kept.append((k * shell, mean, max(se, 1e-9), float(excess[inner].mean()) if k < 0 and inner.any() else np.nan))
    table = np.array(kept).reshape(-1, 4)
    return RadialResiduals(table[:, 0], table[:, 1], table[:, 2], table[:, 3])


def residual_flags(radial: RadialResiduals) -> list[Flag]:
    """Flags for residuals that follow the surface, and for an edge that overshoots."""
    flags = []
    if radial.rms > 0.02 and radial.strongest > _SIGNIFICANT:
        flags.append(
            Flag(
                "residuals_structured",
                f"the spheres' edges differ from a blurred sphere's by {100 * radial.rms:.1f} % of the contrast (root "
                "mean square over distance from the surface): the blur may not be Gaussian, or a diameter may be wrong",
                round(100 * radial.rms, 2),
            )
        )
    inside = np.isfinite(radial.excess)
    if inside.any():
        k = int(np.argmax(np.where(inside, radial.excess, -np.inf)))
        # The fitted level lies between rim and middle: the rim is compared with the lower of level and middle.
        rise = float(radial.excess[k] - min(np.mean(radial.excess[inside][: max(1, inside.sum() // 4)]), 0.0))
        if rise > 0.04 and radial.residual[k] > _SIGNIFICANT * radial.se[k]:
            flags.append(
                Flag(
                    "edge_overshoot",
                    f"inside its edge the largest sphere rises {100 * rise:.1f} % of the contrast above its middle, as "
                    "reconstructions with resolution modelling do: a Gaussian describes them badly",
                    round(100 * rise, 2),
                )
            )
    return flags


def _anchors(jacobian: Array, *, shared: int) -> Array:
    """Rows that hold every sphere's own parameters where they are, with a millionth of the data's weight.

    Without them, leaving out a sphere that is one block would leave its centre undetermined, though that centre has no
    part in the widths then.
    """
    lengths = _ANCHOR * np.sqrt(np.sum(jacobian**2, axis=0))
    rows: Array = np.diag(lengths)[shared:]
    return rows


def leave_one_out(residuals: Array, *, jacobian: Array, blocks: NDArray[np.int64], shared: int = SHARED) -> Jackknife:
    """Delete-one-block jackknife of a sphere fit whose first `shared` parameters belong to all spheres."""
    anchors = _anchors(jacobian, shared=shared)
    return block_jackknife(
        np.concatenate([residuals, np.zeros(len(anchors))]),
        jacobian=np.vstack([jacobian, anchors]),
        blocks=np.concatenate([blocks, np.full(len(anchors), -1)]),
    )


def inflated_errors(
    errors: Jackknife, *, blocks: NDArray[np.int64], spheres: Sequence[Sphere], fit: SphereFit, noise_mm: float
) -> tuple[float, float] | None:
    """Standard errors of the two sigmas (mm) with the covariance of neighbouring sectors put back.

    Sectors that touch share noise, which a jackknife takes for independent. Each block's share of the variance is
    divided by what blocks of its width keep of it, along both directions of the sphere's surface. Spheres that are one
    block have no neighbours. `noise_mm` is the noise's filter width; its autocorrelation is the root of two wider.
    """
    if errors.se is None or errors.leave_one_out is None:
        return None
    kept = np.ones(len(spheres))
    for number, sphere in enumerate(spheres):
        count, width = _sectors(sphere, fit, _block_width_mm(noise_mm))
        if count > 1:
            kept[number] = shortfall(np.sqrt(2.0) * noise_mm, block_mm=width) ** 2
    labels = np.unique(blocks[blocks >= 0])
    moved = errors.leave_one_out[:, :2]
    shares = (moved - moved.mean(axis=0)) ** 2
    whole = np.maximum(shares.sum(axis=0), np.finfo(float).tiny)
    inflation = np.sqrt(np.sum(shares / kept[labels // (_BLOCKS_OF_A_SPHERE[0] + 1), None], axis=0) / whole)
    return float(errors.se[0] * inflation[0]), float(errors.se[1] * inflation[1])


def compare_halves(
    fit: SphereFit, *, blocks: NDArray[np.int64], se_mm: tuple[float, float] | None
) -> tuple[dict[str, object] | None, list[Flag]]:
    """Both halves' widths (alternate blocks) for the record, and a flag where they disagree.

    `se_mm` holds the common fit's standard errors of the two widths: the difference of two halves that share nothing
    has twice that.
    """
    anchors = _anchors(fit.jacobian, shared=SHARED)
    labels = np.unique(blocks)
    if len(labels) < 2:
        return None, []
    # Each half gets the anchors, as part of its first block.
    halves = two_halves(
        np.concatenate([fit.residuals, np.zeros(2 * len(anchors))]),
        jacobian=np.vstack([fit.jacobian, anchors, anchors]),
        blocks=np.concatenate([blocks, np.repeat(labels[:2], len(anchors))]),
    )
    if halves is None:
        return None, []
    record: dict[str, object] = {"how": "alternate blocks, one Gauss-Newton step each from the common fit"}
    flags = []
    for number, name in enumerate(("in_plane", "axial")):
        first, second = (
            FWHM_PER_SIGMA * float(fit.parameters[number] + half[number]) for half in (halves.first, halves.second)
        )
        se = None if se_mm is None else 2.0 * se_mm[number]
        record[name] = {
            "first_fwhm_mm": round(first, 4),
            "second_fwhm_mm": round(second, 4),
            "difference_se_mm": None if se is None else round(se, 4),
        }
        if se is not None and abs(first - second) > max(3.0 * se, 0.2):
            flags.append(
                Flag(
                    "halves_disagree",
                    f"two halves of the data give {first:.2f} and {second:.2f} mm {name.replace('_', '-')}, more than "
                    "3 standard errors apart",
                    round(first - second, 4),
                )
            )
    return record, flags


def width_variation(
    fit: SphereFit, *, voxels: Voxels, blocks: NDArray[np.int64], spheres: Sequence[Sphere]
) -> tuple[list[dict[str, float | None]], list[Flag]]:
    """Each large sphere's own widths (one Gauss-Newton step from the common fit), and a flag where one stands out.

    Spheres under twice the width or with fewer than five blocks have none.
    """
    widths = FWHM_PER_SIGMA * fit.parameters[:2]
    large = [
        k
        for k, sphere in enumerate(spheres)
        if 2.0 * sphere.radius_mm >= 2.0 * widths.max()
        and np.unique(blocks[voxels.owner == k]).size >= _BLOCKS_TO_SPEAK
    ]
    if len(large) < 2:
        return [], []
    own = np.zeros((fit.residuals.size, 2 * len(large)))
    shared = fit.jacobian[:, :2].copy()
    for column, k in enumerate(large):
        mine = voxels.owner == k
        own[mine, 2 * column : 2 * column + 2] = fit.jacobian[mine, :2]
        shared[mine] = 0.0
    rest = shared[:, np.any(shared != 0.0, axis=0)]
    jacobian = np.hstack([own, rest, fit.jacobian[:, 2:]])
    solution, *_ = np.linalg.lstsq(jacobian.T @ jacobian, jacobian.T @ fit.residuals, rcond=None)
    # The jackknife wants the residuals that the own widths leave.
    residuals = fit.residuals - jacobian @ solution
    shared_count = own.shape[1] + rest.shape[1] + 1
    errors = leave_one_out(residuals, jacobian=jacobian, blocks=blocks, shared=shared_count).se
    table: list[dict[str, float | None]] = []
    flags = []
    for column, k in enumerate(large):
        row: dict[str, float | None] = {"diameter_mm": 2.0 * spheres[k].radius_mm}
        for direction, name in enumerate(("in_plane", "axial")):
            at = 2 * column + direction
            difference = FWHM_PER_SIGMA * float(solution[at])
            se = None if errors is None else FWHM_PER_SIGMA * float(errors[at])
            row[f"{name}_fwhm_mm"] = round(float(widths[direction]) + difference, 4)
            row[f"{name}_se_mm"] = None if se is None else round(se, 4)
            if se is not None and abs(difference) > max(4.5 * se, 0.75):
                flags.append(
                    Flag(
                        "width_varies",
                        f"the {2 * spheres[k].radius_mm:g} mm sphere alone has an {name.replace('_', '-')} width "
                        f"{difference:+.2f} mm from all spheres' together",
                        round(difference, 4),
                    )
                )
        table.append(row)
    return table, flags


def odd_spheres(fit: SphereFit, *, voxels: Voxels, spheres: Sequence[Sphere]) -> list[tuple[int, float]]:
    """Spheres whose own brightness is not the common hot level: (number, own level over common level).

    Odd is beyond 25 % for a sphere of 2.5 widths or more, and beyond 50 % for smaller ones, whose brightness rests on
    the width as well.
    """
    fwhm = FWHM_PER_SIGMA * max(fit.sigma_in_plane_mm, fit.sigma_axial_mm)
    odd = []
    for k, sphere in enumerate(spheres):
        mine = voxels.owner == k
        own = fit.jacobian[mine, SHARED + EACH * k : SHARED + EACH * (k + 1)]
        columns = np.column_stack([fit.jacobian[mine, 2], own])
        step, *_ = np.linalg.lstsq(columns, fit.residuals[mine], rcond=None)
        ratio = 1.0 + float(step[0]) / fit.hot
        allowed = 0.25 if 2.0 * sphere.radius_mm >= 2.5 * fwhm else 0.5
        if abs(ratio - 1.0) > allowed:
            odd.append((k, ratio))
    return odd


def other_objects(
    remainder: Array,
    *,
    voxel_mm: tuple[float, float, float],
    voxels: Voxels,
    fit: SphereFit,
    spheres: Sequence[Sphere],
    wall_mm: float,
) -> NDArray[np.bool_]:
    """Voxels under another object's influence: where the image without its spheres leaves the local background.

    Parameters
    ----------
    remainder
        The image minus the fitted spheres and plus their displaced background, shape (x, y, z).
    voxel_mm
        Voxel size, mm.
    voxels, fit, spheres, wall_mm
        The first fit.

    Notes
    -----
    The remainder is smoothed by the fitted width. Where it is 40 % of the background or 5 % of the hot level away from
    a sphere's background, and five of its own standard deviations, over at least half a millilitre, there is another
    object (a body's edge, a lung insert, a neighbour not on the list); its blurred edge is felt 2.4 sigma around.
    """
    sigma = np.array([fit.sigma_in_plane_mm, fit.sigma_in_plane_mm, fit.sigma_axial_mm])
    step = np.array(voxel_mm)
    margin = np.ceil(4.0 * sigma / step).astype(int) + 1
    low = np.maximum(voxels.index.min(axis=0) - margin, 0)
    high = np.minimum(voxels.index.max(axis=0) + margin + 1, remainder.shape)
    box = tuple(slice(a, b) for a, b in zip(low, high, strict=True))
    smooth = ndimage.gaussian_filter(
        remainder[box], np.maximum(sigma, sigma_from_fwhm(4.0)) / step, mode="nearest", truncate=3.0
    )
    backgrounds = np.array([fit.background(k) for k in range(len(spheres))])
    at = tuple((voxels.index - low).T)
    level = np.full(smooth.shape, np.nan)
    level[at] = backgrounds[voxels.owner]
    deviation = smooth[at] - level[at]
    noise = 1.4826 * float(np.median(np.abs(deviation - np.median(deviation))))
    limit = max(0.4 * float(np.median(np.abs(backgrounds))), 0.05 * fit.hot, 5.0 * noise)
    typical = float(np.median(backgrounds))
    other = np.abs(smooth - np.where(np.isnan(level), typical, level)) > limit
    regions, count = ndimage.label(other)
    if count:
        sizes = np.bincount(regions.ravel())
        sizes[0] = 0
        other = (sizes * float(np.prod(step)) >= 500.0)[regions]
    excluded = np.zeros(remainder.shape, dtype=bool)
    if other.any():
        near = ndimage.distance_transform_edt(~other, sampling=step / (2.4 * sigma)) <= 1.0
        excluded[box] = near
    for k, sphere in enumerate(spheres):
        centre = fit.centre_mm(k)
        radius = sphere.radius_mm + wall_mm
        first = np.maximum(np.floor((centre - radius) / step).astype(int), 0)
        last = np.minimum(np.ceil((centre + radius) / step).astype(int) + 1, remainder.shape)
        x, y, z = (np.arange(a, b) * s - c for a, b, s, c in zip(first, last, step, centre, strict=True))
        ball = x[:, None, None] ** 2 + y[:, None] ** 2 + z**2 <= radius**2
        excluded[tuple(slice(a, b) for a, b in zip(first, last, strict=True))][ball] = False
    return excluded
