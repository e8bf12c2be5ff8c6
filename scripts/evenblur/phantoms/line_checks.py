"""What else a line's image tells: round or not, tails, each line's own width, straightness, two halves."""

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from evenblur.phantoms.base import Flag
from evenblur.phantoms.common import halves_of_width
from evenblur.phantoms.cylinder_checks import tenth_to_half
from evenblur.phantoms.line_errors import LineErrors, jackknife_of
from evenblur.phantoms.line_fit import LineFit, own_widths
from evenblur.phantoms.line_model import COMMON, PER_LINE, RATIO, SIGMA
from evenblur.statistics import block_jackknife, jackknife, two_halves
from evenblur.widths import FWHM_PER_SIGMA

SHORT_TAILS = -0.1
"""Excess kurtosis of a thick capillary taken as thin, where its own size makes a fifth of the width."""


@dataclass(frozen=True)
class LineShape:
    """Figures beyond the width; an error is infinite where it is unknown.

    `own_mm` and `own_se_mm` hold each line's own in-plane width and its standard error, shape (lines,).
    """

    x_minus_y_mm: float
    x_minus_y_se_mm: float
    x_to_y: float
    kurtosis: float
    kurtosis_se: float
    own_mm: NDArray[np.float64]
    own_se_mm: NDArray[np.float64]


def check_shape(
    fit: LineFit, errors: LineErrors, *, voxel_mm: tuple[float, float, float], diameter_mm: float
) -> LineShape:
    """What one width for all does not say: x against y, tails (one Gauss-Newton step), each line's own width.

    Parameters
    ----------
    fit, errors
        A fit of lines and its errors.
    voxel_mm
        Voxel sizes, mm.
    diameter_mm
        Inner diameter of the capillaries.
    """
    sample = fit.sample
    sigma, stretch = float(fit.parameters[SIGMA]), float(np.exp(fit.parameters[RATIO]))
    offset, peaks = fit.offsets(), fit.peaks()
    shape = peaks * fit.solved.shapes[np.arange(sample.values.size), sample.owner]
    oval, tails = np.zeros(shape.size), np.zeros(shape.size)
    for k in range(sample.count):
        mine = sample.owner == k
        slope = fit.line(k)[2:4]
        covariance = sigma**2 * (np.eye(2) + stretch**2 * np.outer(slope, slope)) + diameter_mm**2 / 16.0 * np.eye(2)
        v = np.linalg.solve(covariance, offset[:, mine])
        square = np.sum(v * offset[:, mine], axis=0)
        oval[mine] = shape[mine] * sigma * (v[0] ** 2 - v[1] ** 2)
        # A fourth cumulant that is the same in all directions of the plane (Gram-Charlier).
        tails[mine] = shape[mine] * (square**2 - 8.0 * square + 8.0) / 24.0
    columns = [oval, tails]
    own_column = fit.fitted.jacobian[:-1, SIGMA]
    for k in range(1, sample.count):
        columns.append(np.where(sample.owner == k, own_column, 0.0) - np.where(sample.owner == 0, own_column, 0.0))
    extra_columns = fit.solved.project(np.column_stack(columns))
    design = np.hstack([fit.fitted.jacobian, np.vstack([extra_columns, np.zeros((1, len(columns)))])])
    size = np.sqrt(np.maximum(np.sum(design**2, axis=0), 1e-300))
    scaled = design / size
    moves = np.linalg.lstsq(scaled.T @ scaled, scaled.T @ fit.fitted.residuals, rcond=1e-10)[0] / size
    first = fit.free.size
    spread = block_jackknife(
        fit.fitted.residuals - design @ moves, jacobian=design, blocks=np.append(errors.labels, np.int64(-1))
    )
    inflate = _inflation(fit, errors)
    extra = moves[first:]
    se = np.full(extra.size, np.inf)
    own_se = np.full(sample.count, np.inf)
    if sample.count == 1 and errors.se is not None:
        own_se[0] = errors.se
    if spread.se is not None and spread.leave_one_out is not None:
        se = spread.se[first:] * inflate
        if sample.count > 1:
            moved = spread.leave_one_out[:, first + 2 :]
            whole = spread.leave_one_out[:, [SIGMA]] + np.column_stack([-moved.sum(axis=1), moved])
            own_se = np.asarray(jackknife(whole)[0]) * inflate
    oval_step = float(extra[0])
    return LineShape(
        2.0 * oval_step * FWHM_PER_SIGMA,
        2.0 * float(se[0]) * FWHM_PER_SIGMA,
        (sigma + oval_step) / max(sigma - oval_step, 1e-6),
        float(extra[1]),
        float(se[1]),
        own_widths(fit, voxel_mm=voxel_mm, diameter_mm=diameter_mm),
        own_se * FWHM_PER_SIGMA,
    )


def _inflation(fit: LineFit, errors: LineErrors) -> float:
    """How much larger the width's accepted error is than the jackknife's over the same blocks."""
    plain = jackknife_of(fit, fit.fitted.jacobian, errors.labels)
    if errors.se is None or plain.se is None:
        return 1.0
    return max(1.0, errors.se / max(float(plain.se[SIGMA]), 1e-12 * float(fit.parameters[SIGMA])))


def shape_flags(shape: LineShape) -> list[Flag]:
    """Flags of what `check_shape` found."""
    flags = []
    if abs(np.log(max(shape.x_to_y, 1e-3))) > np.log(1.1) and abs(shape.x_minus_y_mm) > 3.5 * shape.x_minus_y_se_mm:
        flags.append(
            Flag(
                "in_plane_not_round",
                f"The widths along x and y differ by {abs(shape.x_minus_y_mm):.1f} mm; the in-plane width is their "
                "mean.",
                round(shape.x_minus_y_mm, 4),
            )
        )
    if shape.kurtosis > 0.4 and shape.kurtosis > 3.5 * shape.kurtosis_se:
        flags.append(
            Flag(
                "tail_heavy",
                f"The blur has longer tails than a Gaussian (excess kurtosis {shape.kurtosis:.1f}): one width does not "
                "say it all.",
                round(shape.kurtosis, 4),
            )
        )
    if shape.kurtosis < SHORT_TAILS and shape.kurtosis < -3.5 * shape.kurtosis_se:
        flags.append(
            Flag(
                "not_gaussian",
                f"The lines have shorter tails than a Gaussian (excess kurtosis {shape.kurtosis:.2f}), as thick "
                "capillaries have: is source_diameter_mm right?",
                round(shape.kurtosis, 4),
            )
        )
    span = float(np.ptp(shape.own_mm))
    if span > 0.4 and span > 4.0 * np.sqrt(2.0) * float(np.max(shape.own_se_mm)):
        flags.append(
            Flag(
                "width_varies",
                f"The lines' in-plane widths differ by {span:.1f} mm; one width is given for all.",
                round(span, 4),
            )
        )
    return flags


def shape_record(shape: LineShape) -> dict[str, Any]:
    """What `check_shape` found, for the record."""
    ratio = tenth_to_half(shape.kurtosis) if abs(shape.kurtosis) < 8.0 else None
    return {
        "x_minus_y_mm": round(shape.x_minus_y_mm, 4),
        "x_to_y": round(shape.x_to_y, 4),
        "excess_kurtosis": round(shape.kurtosis, 4),
        "tenth_to_half": None if ratio is None else round(ratio, 4),
    }


def check_halves(fit: LineFit, errors: LineErrors) -> tuple[dict[str, Any] | None, list[Flag]]:
    """The in-plane width from two halves of the data, and a flag where they disagree."""
    n = fit.sample.values.size
    used = np.arange(fit.free.size) != RATIO  # half the data may not tell the held ratio at all
    halves = two_halves(fit.fitted.residuals[:n], jacobian=fit.fitted.jacobian[:n, used], blocks=errors.labels)
    if halves is None:
        return None, []
    entry, flags = halves_of_width(
        halves,
        at=SIGMA,
        sigma_mm=float(fit.parameters[SIGMA]),
        words="in-plane",
        least_mm=0.5,
        errors=5.0,
        inflation=_inflation(fit, errors),
    )
    return {"in_plane": entry}, flags


def describe_lines(
    fit: LineFit, shape: LineShape, *, centre_mm: tuple[float, float], step_mm: float, unit: float
) -> list[dict[str, Any]]:
    """Place, tilt and own width of every line; `radius_mm` is its middle's distance from the axis of the field.

    `unit` turns the fit's activities into the image's.
    """
    rows = []
    for k, line in enumerate(fit.sample.lines):
        x, y, slope_x, slope_y, bend_x, bend_y, background = (
            float(v) for v in fit.parameters[COMMON + PER_LINE * k : COMMON + PER_LINE * (k + 1)]
        )
        steepness = float(np.hypot(slope_x, slope_y))
        amplitude = fit.solved.amplitudes[(fit.sample.slices >= line.first) & (fit.sample.slices <= line.last), k]
        se = float(shape.own_se_mm[k])
        rows.append(
            {
                "centre_mm": [round(x, 3), round(y, 3), round(float(fit.sample.middle_mm[k]), 3)],
                "radius_mm": round(float(np.hypot(x - centre_mm[0], y - centre_mm[1])), 2),
                "tilt_deg": round(float(np.degrees(np.arctan(steepness))), 3),
                "tilt_direction_deg": round(float(np.degrees(np.arctan2(slope_y, slope_x))), 1),
                "bend_mm": round(float(np.hypot(bend_x, bend_y)), 3),
                "in_plane_mm": round(float(shape.own_mm[k]), 4),
                "se_mm": round(se, 4) if np.isfinite(se) else None,
                "length_mm": round((line.last - line.first + 1) * step_mm, 2),
                "ends_seen": line.ends_seen,
                "peak": float(f"{unit * np.median(amplitude):.6g}"),
                "activity_variation": round(float(np.std(amplitude) / max(np.mean(amplitude), 1e-300)), 4),
                "background": float(f"{unit * background:.6g}"),
            }
        )
    return rows
