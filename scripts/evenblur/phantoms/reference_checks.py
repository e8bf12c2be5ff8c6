"""Does the image show the reference? What the residuals of the fit say beyond the widths, as flags and figures."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import special

from evenblur import statistics
from evenblur.phantoms.base import Flag, MeasurementError
from evenblur.phantoms.reference_fit import AXIAL, IN_PLANE, Fit, State
from evenblur.phantoms.reference_model import MARGIN_WIDTHS, ReferenceModel
from evenblur.phantoms.reference_search import CoarseImage
from evenblur.widths import FWHM_PER_SIGMA

FLAGGED_MISMATCH = 0.005
REFUSED_MISMATCH = 0.10
"""Shares of the smoothed image's variance that the reference leaves unexplained."""

REFUSED_SEARCH = 0.2
"""The same share after the coarse search, whose fit is not yet the last word."""

FLAGGED_SPOT = 0.15
REFUSED_ELSEWHERE = 0.5
FLAGGED_ELSEWHERE = 0.03
FLAGGED_OVERSHOOT = 0.01
FLAGGED_DIFFERENCE_MM = 0.5
SIGNIFICANT = 4.0
"""Standard errors beyond which a difference is called one: about 1 false alarm in 5,000 with 30 blocks."""


@dataclass(frozen=True)
class Mismatch:
    """What the smoothed image holds that the fitted reference does not.

    `share` of the variance near the object is unexplained; `spot` is the largest residual over the object's level;
    `elsewhere` is the activity away from the object over the object's own.
    """

    share: float
    spot: float
    elsewhere: float


def mismatch(image: CoarseImage, *, model: ReferenceModel, state: State) -> Mismatch:
    """Compare the smoothed image, where noise hardly counts, with the fitted reference smoothed alike."""
    in_plane, axial = (float(np.hypot(width, image.width_mm)) for width in (state.in_plane_mm, state.axial_mm))
    margin = min(MARGIN_WIDTHS * max(in_plane, axial), 60.0)
    around = model.within(image.points_mm, motion=state.motion, margin_mm=margin)
    # Near the image's border the smoothing saw only part of what lies there (2 sigma of it are 0.85 widths).
    half = np.max(np.abs(image.points_mm), axis=0) + 0.5 * image.step_mm
    central = np.all(np.abs(image.points_mm) < half - 0.85 * image.width_mm, axis=1)
    near = around & image.valid & central
    if int(near.sum()) < 20:
        raise MeasurementError("hardly any of the reference lies on measured voxels")
    points, values = image.points_mm[near], image.values[near]
    value = model.sample(points, motion=state.motion, in_plane_mm=in_plane, axial_mm=axial, rough=True).value
    design = np.stack([value, np.ones_like(value)], axis=1)
    solution, *_ = np.linalg.lstsq(design, values, rcond=None)
    residual = values - design @ solution
    spread = float(np.sum((values - values.mean()) ** 2))
    level = abs(float(solution[0])) * model.usual_level
    beyond = image.values[~around] - solution[1]
    # Voxels over a sixth of the object's level: noise, smoothed this far, does not get there.
    lit = beyond[beyond > level / 6.0]
    if model.open_faces:
        lit = lit[:0]  # the object goes on beyond the reference: what lies there is no other object
    own = float(np.sum(np.maximum(values - solution[1], 0.0)))
    return Mismatch(
        share=float(residual @ residual) / spread if spread > 0.0 else 1.0,
        spot=float(np.max(np.abs(residual))) / level if level > 0.0 else np.inf,
        elsewhere=float(lit.sum()) / own if own > 0.0 else np.inf,
    )


def mismatch_flags(found: Mismatch) -> list[Flag]:
    """Flags for what the reference does not explain.

    Raises
    ------
    MeasurementError
        If so much is unexplained that the image shows something else.
    """
    if found.share > REFUSED_MISMATCH:
        raise MeasurementError(
            f"the image does not show the reference: {100 * found.share:.0f} % of its structure is left unexplained "
            f"(at most {100 * REFUSED_MISMATCH:.0f} % can pass)"
        )
    if found.elsewhere > REFUSED_ELSEWHERE:
        raise MeasurementError(
            f"the image shows more than the reference: there is {found.elsewhere:.1f} times as much activity away "
            "from the object as in it"
        )
    flags = []
    if found.share > FLAGGED_MISMATCH:
        flags.append(
            Flag(
                "reference_mismatch",
                f"the reference leaves {100 * found.share:.1f} % of the smoothed image's variance unexplained "
                f"(flagged beyond {100 * FLAGGED_MISMATCH:.1f} %): the object was filled or built otherwise",
                round(found.share, 4),
            )
        )
    elif found.spot > FLAGGED_SPOT:
        flags.append(
            Flag(
                "reference_mismatch",
                f"somewhere the image differs from the reference by {100 * found.spot:.0f} % of the object's level "
                f"(flagged beyond {100 * FLAGGED_SPOT:.0f} %)",
                round(found.spot, 4),
            )
        )
    elif found.elsewhere > FLAGGED_ELSEWHERE:
        flags.append(
            Flag(
                "reference_mismatch",
                f"activity of {100 * found.elsewhere:.0f} % of the object's lies away from the object "
                f"(flagged beyond {100 * FLAGGED_ELSEWHERE:.0f} %)",
                round(found.elsewhere, 4),
            )
        )
    return flags


def overshoot(
    residuals: NDArray[np.float64],
    *,
    design: NDArray[np.float64],
    pattern: NDArray[np.float64],
    blocks: NDArray[np.int64],
    variances_mm2: dict[int, float],
) -> tuple[float, float | None]:
    """How far edges overshoot their plateau, as a share of the step, and the significance in standard errors.

    The transfer function is allowed a factor 1 − b (sigma omega)² + c (sigma omega)⁴ beside the Gaussian, where b is a
    change of the width's variance by 2 b sigma² (`variances_mm2`: sigma² for each width's column of the design). A flat
    edge then reads Phi(u) − b u phi(u) − c (u³ − 3 u) phi(u), whose maximum over 1 is the overshoot. b and c are one
    Gauss-Newton step from the fit, so that strong overshoot reads too small; the significance is that of c.
    """
    joined = np.column_stack([design, pattern])
    lengths = np.linalg.norm(joined, axis=0)
    solution = np.linalg.lstsq(joined / lengths, residuals, rcond=None)[0] / lengths
    coefficient = float(solution[-1])
    widening = float(np.mean([solution[at] / (2.0 * variance) for at, variance in variances_mm2.items()]))
    u = np.linspace(0.0, 6.0, 601)
    bump = (widening * u + coefficient * (u**3 - 3.0 * u)) * np.exp(-0.5 * u**2) / np.sqrt(2.0 * np.pi)
    edge = special.ndtr(u) - bump
    se = statistics.block_jackknife(residuals, jacobian=joined, blocks=blocks).se
    significance = None if se is None or se[-1] <= 0.0 else abs(coefficient) / float(se[-1])
    return max(0.0, float(edge.max()) - 1.0), significance


def overshoot_flag(amount: float, significance: float | None) -> list[Flag]:
    """A flag where edges overshoot by over 1 % and beyond the noise."""
    if amount <= FLAGGED_OVERSHOOT or (significance is not None and significance < SIGNIFICANT):
        return []
    return [
        Flag(
            "edge_overshoot",
            f"edges overshoot by at least {100 * amount:.1f} % of their step (flagged beyond "
            f"{100 * FLAGGED_OVERSHOOT:.0f} %): the blur is no Gaussian, as after reconstruction with a model of it "
            "or sharpening",
            round(amount, 4),
        )
    ]


def width_differences(
    fit: Fit,
    *,
    points_mm: NDArray[np.float64],
    design: NDArray[np.float64],
    blocks: NDArray[np.int64],
    columns: dict[str, int],
) -> list[tuple[str, float, float | None]]:
    """How each width differs between two parts of the object: (where, difference in mm, its standard error).

    The parts lie far from and near to the image's axis, and high and low along it, with half of the width's
    information each. The differences come from one Gauss-Newton step with each width's column split in two.
    """
    found = []
    radius = np.hypot(points_mm[:, 0], points_mm[:, 1])
    for name, column in columns.items():
        width = fit.state.in_plane_mm if column == IN_PLANE else fit.state.axial_mm
        whole = fit.jacobian[:, column]
        for where, coordinate in (("outer minus inner part", radius), ("upper minus lower part", points_mm[:, 2])):
            order = np.argsort(coordinate, kind="stable")
            information = np.cumsum(whole[order] ** 2)
            middle = coordinate[order[int(np.searchsorted(information, 0.5 * information[-1]))]]
            split = np.where(coordinate > middle, 0.5, -0.5) * whole
            joined = np.column_stack([design, split])
            lengths = np.linalg.norm(joined, axis=0)
            solution, *_ = np.linalg.lstsq(joined / lengths, fit.residuals, rcond=None)
            to_mm = FWHM_PER_SIGMA**2 / (2.0 * width)
            se = statistics.block_jackknife(fit.residuals, jacobian=joined, blocks=blocks).se
            found.append(
                (
                    f"{name}, {where}",
                    float(solution[-1] / lengths[-1]) * to_mm,
                    None if se is None else float(se[-1]) * to_mm,
                )
            )
    return found


def width_flag(differences: list[tuple[str, float, float | None]]) -> list[Flag]:
    """A flag for the largest difference of width over 0.5 mm and beyond the noise."""
    worth = [
        (where, difference)
        for where, difference, se in differences
        if abs(difference) > FLAGGED_DIFFERENCE_MM and (se is not None and abs(difference) > SIGNIFICANT * se)
    ]
    if not worth:
        return []
    where, difference = max(worth, key=lambda item: abs(item[1]))
    return [
        Flag(
            "width_varies",
            f"the width is not the same throughout the object: {where}, {difference:+.2f} mm "
            f"(flagged beyond {FLAGGED_DIFFERENCE_MM} mm)",
            round(difference, 4),
        )
    ]


def halves_flag(difference_mm: dict[str, tuple[float, float | None]]) -> list[Flag]:
    """A flag where two interleaved halves of the data disagree by over 0.3 mm and beyond the noise."""
    worth = [
        (name, difference)
        for name, (difference, se) in difference_mm.items()
        if abs(difference) > 0.3 and se is not None and abs(difference) > SIGNIFICANT * se
    ]
    if not worth:
        return []
    name, difference = max(worth, key=lambda item: abs(item[1]))
    return [
        Flag(
            "halves_disagree",
            f"two interleaved halves of the voxels give {name} widths {abs(difference):.2f} mm apart, more than their "
            "errors explain",
            round(difference, 4),
        )
    ]


WIDTH_COLUMNS = {"in-plane": IN_PLANE, "axial": AXIAL}
"""Names of the two widths and their columns in the fit's Jacobian."""
