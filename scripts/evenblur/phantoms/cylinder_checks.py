"""What a cylinder's residuals say of the Gaussian model: the edge's shape, and whether one width holds everywhere."""

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import brentq

from evenblur.phantoms.base import Flag
from evenblur.phantoms.cylinder_fit import SIGMA, SIGMA_Z, WALL, CylinderFit
from evenblur.statistics import block_jackknife
from evenblur.widths import fwhm_from_sigma

GAUSSIAN_TENTH_TO_HALF = float(np.sqrt(np.log2(10.0)))
"""Full width at tenth over full width at half maximum of any Gaussian: 1.8226."""


@dataclass(frozen=True)
class EdgeProfile:
    """Mean profile across the wall: distance from it (mm), measured and fitted values (0 to 1), and their errors."""

    position_mm: NDArray[np.float64]
    measured: NDArray[np.float64]
    fitted: NDArray[np.float64]
    error: NDArray[np.float64]


def edge_profile(fit: CylinderFit, blocks: NDArray[np.int64]) -> EdgeProfile:
    """Mean over the wall in bins of a quarter sigma, background 0 and plateau 1, with errors from the blocks."""
    wall = fit.sample.group == WALL
    sigma, radius = fit.value("sigma"), fit.value("radius")
    contrast = fit.value("inside") - fit.value("outside")
    distance = fit.placed.rho[wall] - radius
    miss = fit.fitted.residuals[: wall.size][wall] / contrast
    step = max(0.25 * sigma, 1.001 * 2.0 * (7.0 * sigma + 2.0) / 190.0)
    near = (distance > -6.0 * sigma) & (distance < 6.0 * sigma)
    bins = np.floor((distance[near] + 6.0 * sigma) / step).astype(int)
    count = np.bincount(bins)
    good = np.flatnonzero(count >= 8)

    def mean(values: NDArray[np.float64]) -> NDArray[np.float64]:
        return np.asarray(np.bincount(bins, values)[good] / count[good])

    fitted = mean(fit.disc[wall][near])
    offset = mean(miss[near])
    label = blocks[wall][near]
    groups = int(label.max()) + 1 if label.size else 0
    error = np.full(good.size, np.nan)
    if groups >= 12:
        sums = np.zeros((groups, count.size))
        inside = label >= 0
        centred = miss[near] - np.bincount(bins, miss[near])[bins] / count[bins]
        np.add.at(sums, (label[inside], bins[inside]), centred[inside])
        error = np.sqrt(np.sum(sums**2, axis=0))[good] / count[good]
    return EdgeProfile(mean(distance[near]), fitted + offset, fitted, error)


def check_edge(fit: CylinderFit, profile: EdgeProfile) -> tuple[list[Flag], dict[str, Any]]:
    """Flags for an overshoot inside the edge, for tails beyond it, and for any other structure in the residuals."""
    sigma = fit.value("sigma")
    miss, d = profile.measured - profile.fitted, profile.position_mm / sigma
    error = np.where(np.isfinite(profile.error), profile.error, 0.0)
    flags, found = [], {}
    inner = (d > -4.0) & (d < -0.7)
    if inner.any():
        k = int(np.argmax(np.where(inner, miss, -np.inf)))
        overshoot = float(miss[k])
        found["edge_overshoot"] = round(overshoot, 5)
        if overshoot > 0.015 and overshoot > 4.0 * error[k]:
            flags.append(
                Flag(
                    "edge_overshoot",
                    f"Just inside the edge the image is {100 * overshoot:.1f} % brighter than a Gaussian blur "
                    "allows, as reconstructions with a point-spread model make it: one width does not say it all.",
                    round(overshoot, 4),
                )
            )
    outer = (d > 1.2) & (d < 4.0)
    if outer.any():
        tail = float(miss[outer].mean())
        found["tail"] = round(tail, 5)
        if tail > 0.01 and tail > 4.0 * float(np.sqrt(np.mean(error[outer] ** 2))):
            flags.append(
                Flag(
                    "tail_heavy",
                    f"Outside the edge the image falls more slowly than a Gaussian ({100 * tail:.1f} % of the activity "
                    "above the fit).",
                    round(tail, 4),
                )
            )
    near = np.abs(d) < 4.0
    structure = float(np.sqrt(np.mean(miss[near] ** 2))) if near.any() else 0.0
    noise = float(np.sqrt(np.mean(error[near] ** 2))) if near.any() else 0.0
    found["structured_residual"] = round(structure, 5)
    if structure > 0.01 and structure > 3.0 * noise:
        flags.append(
            Flag(
                "residuals_structured",
                f"Across the edge the image departs from the fitted profile by {100 * structure:.1f} % of the activity "
                "all round: the object or the blur is not what the model says.",
                round(structure, 4),
            )
        )
    return flags, found


def misfit(fit: CylinderFit) -> float:
    """How much more the fit misses within two sigmas of the wall than on flat ground, as a share of the activity."""
    residuals = fit.fitted.residuals[: fit.sample.group.size] / (fit.value("inside") - fit.value("outside"))
    u = np.abs(fit.placed.rho - fit.value("radius")) / fit.sigma_normal
    wall = fit.sample.group == WALL
    near, flat = wall & (u < 2.0), wall & (u > 3.5)
    if not near.any():
        return 0.0
    ground = float(np.mean(residuals[flat] ** 2)) if flat.any() else 0.0
    return float(np.sqrt(max(float(np.mean(residuals[near] ** 2)) - ground, 0.0)))


def check_variation(
    fit: CylinderFit, blocks: NDArray[np.int64], *, axial_known: bool
) -> tuple[list[Flag], dict[str, Any]]:
    """Flags for a width that changes along the axis or round it, or from end to end, and for a shape not Gaussian.

    Each is one more parameter that the fit did not have: its value after one Gauss-Newton step, with its jackknife
    error. The shape is the fourth cumulant of the edge's line spread (Gram-Charlier series, third Hermite polynomial).
    """
    n, jacobian = fit.sample.group.size, fit.fitted.jacobian
    count = fit.fitted.residuals.size
    wall = fit.sample.group == WALL
    radial = np.where(wall, jacobian[:n, SIGMA], 0.0)
    angle = np.arctan2(fit.placed.normal[1], fit.placed.normal[0])
    u = (fit.placed.rho - fit.value("radius")) / fit.sigma_normal
    contrast = fit.value("inside") - fit.value("outside")
    names = ["along", "cos2", "sin2", "kurtosis"]
    columns = [
        radial * fit.placed.along / fit.sample.half_mm,
        radial * np.cos(2.0 * angle),
        radial * np.sin(2.0 * angle),
        np.where(wall, contrast * (u**3 - 3.0 * u) * np.exp(-0.5 * u**2) / np.sqrt(2.0 * np.pi) / 24.0, 0.0),
    ]
    if all(fit.sample.ends):
        names.append("ends")
        columns.append(np.where(wall, 0.0, jacobian[:n, SIGMA_Z] * np.where(fit.sample.group == 1, -1.0, 1.0)))
    extra = np.zeros((count, len(columns)))
    extra[:n] = np.stack(columns, axis=1)
    used = np.any(jacobian != 0.0, axis=0)
    design = np.hstack([jacobian[:, used], extra])
    normal = design.T @ design
    scale = np.sqrt(np.diag(normal))
    if not np.all(scale > 1e-9 * scale.max()):
        return [], {}
    step = np.linalg.lstsq(normal / np.outer(scale, scale), design.T @ fit.fitted.residuals / scale, rcond=1e-10)
    moves = step[0] / scale
    label = np.append(blocks, np.full(count - n, -1, dtype=np.int64))
    spread = block_jackknife(fit.fitted.residuals - design @ moves, jacobian=design, blocks=label)
    moves = moves[-len(columns) :]
    errors = np.full(len(columns), np.inf) if spread.se is None else spread.se[-len(columns) :]
    values, sigmas = dict(zip(names, moves, strict=True)), dict(zip(names, errors, strict=True))
    flags: list[Flag] = []
    found: dict[str, Any] = {}

    def judge(code: str, change: float, se: float, limit: float, sentence: str) -> None:
        found[f"{code}_mm"] = round(float(change), 4)
        if abs(change) > limit and abs(change) > 3.5 * se:
            flags.append(Flag(code, sentence.format(abs(change)), round(float(change), 4)))

    double = 2.0 * fwhm_from_sigma(1.0)
    if wall.any() and np.ptp(fit.placed.along[wall]) > 20.0:
        judge(
            "width_varies",
            double * values["along"],
            double * sigmas["along"],
            0.4,
            "The in-plane width changes by {:.1f} mm from one axial end of the object to the other.",
        )
    tilt = 1.0 - float(fit.placed.axis[2]) ** 2
    if (axial_known and any(fit.sample.ends)) or tilt < 0.002:
        size = float(np.hypot(values["cos2"], values["sin2"]))
        se = float(np.hypot(sigmas["cos2"], sigmas["sin2"]))
        judge(
            "in_plane_not_round",
            double * size,
            double * se,
            0.4,
            "The in-plane width differs by {:.1f} mm between two directions at right angles.",
        )
    if "ends" in values:
        judge(
            "axial_width_varies",
            double * values["ends"],
            double * sigmas["ends"],
            0.4,
            "The axial widths at the two ends of the object differ by {:.1f} mm.",
        )
    kurtosis, se = float(values["kurtosis"]), float(sigmas["kurtosis"])
    ratio = tenth_to_half(kurtosis)
    found["tenth_to_half"] = None if ratio is None else round(ratio, 4)
    found["excess_kurtosis"] = round(kurtosis, 4)
    if abs(kurtosis) > 0.3 and abs(kurtosis) > 3.5 * se:
        words = (
            "has longer tails than a Gaussian"
            if kurtosis > 0
            else "is steeper than a Gaussian and overshoots, as reconstructions with a point-spread model make it"
        )
        flags.append(
            Flag(
                "tail_heavy" if kurtosis > 0 else "edge_overshoot",
                f"The blur of the edge {words} (excess kurtosis {kurtosis:.1f}): one width does not say it all.",
                round(kurtosis, 4),
            )
        )
    return flags, found


def tenth_to_half(excess_kurtosis: float) -> float | None:
    """Full width at tenth over full width at half maximum of a Gaussian with a fourth cumulant (Gram-Charlier).

    None where the series is no peak any more.

    >>> round(tenth_to_half(0.0), 4)
    1.8226
    """

    def response(u: float) -> float:
        return float(np.exp(-0.5 * u * u) * (1.0 + excess_kurtosis / 24.0 * (u**4 - 6.0 * u**2 + 3.0)))

    peak = response(0.0)
    if peak <= 0.0:
        return None
    grid = np.linspace(0.0, 8.0, 801)
    values = np.array([response(u) for u in grid])
    crossings = []
    for share in (0.5, 0.1):
        below = np.flatnonzero(values < share * peak)
        k = int(below[0])
        crossings.append(brentq(lambda u, level=share * peak: response(u) - level, grid[k - 1], grid[k]))
    return float(crossings[1] / crossings[0])
