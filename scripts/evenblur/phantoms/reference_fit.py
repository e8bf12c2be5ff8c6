"""Least squares between a measured image and a moved, blurred reference: motion, widths, scale and offset together."""

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from evenblur.phantoms.base import MeasurementError
from evenblur.phantoms.reference_model import ReferenceModel, Sampled
from evenblur.phantoms.rigid import Motion, motion_columns
from evenblur.widths import FWHM_PER_SIGMA

IN_PLANE, AXIAL = 6, 7
"""Columns of the Jacobian that belong to the two variances; before them shift and turn, after them scale and offset."""

WIDEST_MM = 60.0

_STEP_SHRINK = 2.0
_UNDETERMINED = 1e-5


@dataclass(frozen=True)
class State:
    """Parameters of the model scale · (blurred reference) + offset; the widths are FWHM in mm."""

    motion: Motion
    in_plane_mm: float
    axial_mm: float
    scale: float
    offset: float


@dataclass(frozen=True)
class Fit:
    """A fitted state with its residuals (n,) and Jacobian (n, 10).

    Columns: 3 shifts (mm), 3 turns (radians), variance in-plane and axial (mm²), scale, offset.
    """

    state: State
    residuals: NDArray[np.float64]
    jacobian: NDArray[np.float64]
    sampled: Sampled
    converged: bool

    @property
    def square_sum(self) -> float:
        """Sum of the squared residuals."""
        return float(self.residuals @ self.residuals)


def fit_state(
    values: NDArray[np.float64],
    *,
    points_mm: NDArray[np.float64],
    model: ReferenceModel,
    start: State,
    narrowest_mm: float,
    steps: int = 12,
    tolerance_mm: float = 2e-5,
    rough: bool = False,
    frozen: tuple[int, ...] = (),
) -> Fit:
    """Gauss-Newton on all ten parameters, with halved steps where the residuals grow.

    Parameters
    ----------
    values
        Measured values, shape (n,).
    points_mm
        Their positions from the measured array's centre, shape (n, 3).
    model
        The reference.
    start
        Where to start; its scale and offset are fitted at once and may be anything.
    narrowest_mm
        Neither width goes below this.
    steps
        At most so many steps.
    tolerance_mm
        The fit has converged when a step changes neither width nor, at the object's edge, any position by more.
    rough
        Cubic splines, for a search.
    frozen
        Columns of the Jacobian whose parameters keep their start: IN_PLANE or AXIAL where no edge shows the width.

    Returns
    -------
    Fit

    Raises
    ------
    MeasurementError
        If the reference's scale comes out negative (inverted contrast), or a width leaves what can be measured.
    """
    state, sampled, residuals, jacobian = _evaluated(values, points_mm, model, start, rough)
    best = float(residuals @ residuals)
    # Below this the residuals are rounding: nothing is left to improve.
    rounding = 1e-22 * float(values @ values)
    radius = float(np.linalg.norm(model.extent_mm)) / 2.0
    converged = False
    for _ in range(steps):
        jacobian[:, list(frozen)] = 0.0
        change = solve_damped(jacobian, residuals)
        accepted = False
        for _ in range(6):
            trial = _stepped(state, change, narrowest_mm)
            moved = _largest_move(state, trial, radius)
            new = _evaluated(values, points_mm, model, trial, rough)
            square = float(new[2] @ new[2])
            if square <= best or moved < tolerance_mm:
                accepted = True
                break
            change = change / _STEP_SHRINK
        if not accepted:
            break
        state, sampled, residuals, jacobian = new
        best = square
        if moved < tolerance_mm or best <= rounding:
            converged = True
            break
    jacobian[:, list(frozen)] = 0.0
    return Fit(state, residuals, jacobian, sampled, converged)


def require_sense(fit: Fit, *, narrowest_mm: float) -> None:
    """Refuse a fit whose numbers cannot be a scanner's.

    Raises
    ------
    MeasurementError
        If the scale is not positive or a width stands at a limit.
    """
    state = fit.state
    if state.scale <= 0.0:
        raise MeasurementError("the image is dark where the reference is bright: its contrast is inverted")
    for name, width in (("in-plane", state.in_plane_mm), ("axial", state.axial_mm)):
        if width >= 0.98 * WIDEST_MM:
            raise MeasurementError(
                f"the image shows no edges of the reference: the {name} width exceeds {width:.0f} mm"
            )
        if width <= 1.02 * narrowest_mm:
            raise MeasurementError(
                f"the {name} width is below {narrowest_mm:.1f} mm, less than the image's voxels can show"
            )


def solve_damped(jacobian: NDArray[np.float64], residuals: NDArray[np.float64]) -> NDArray[np.float64]:
    """Least-squares step; directions that the data do not determine (turns of a round object) stay at zero."""
    lengths = np.sqrt(np.einsum("ij,ij->j", jacobian, jacobian))
    lengths = np.where(lengths > 0.0, lengths, 1.0)
    normal = jacobian.T @ jacobian / np.outer(lengths, lengths)
    values, vectors = np.linalg.eigh(normal)
    kept = values > _UNDETERMINED * values[-1]
    coordinates = vectors[:, kept].T @ (jacobian.T @ residuals / lengths) / values[kept]
    return np.asarray(vectors[:, kept] @ coordinates / lengths)


def determined_columns(jacobian: NDArray[np.float64], *, count: int = 6) -> NDArray[np.float64]:
    """Replace the first `count` (motion) columns by their determined combinations, so that no column is idle."""
    motion, rest = jacobian[:, :count], jacobian[:, count:]
    lengths = np.sqrt(np.einsum("ij,ij->j", motion, motion))
    lengths = np.where(lengths > 0.0, lengths, 1.0)
    values, vectors = np.linalg.eigh(motion.T @ motion / np.outer(lengths, lengths))
    kept = values > _UNDETERMINED * values[-1]
    return np.concatenate([motion @ (vectors[:, kept] / lengths[:, None]), rest], axis=1)


def edge_area_mm2(fit: Fit, column: int, *, point_mm3: float, level: float) -> float:
    """Area (mm²) of full-contrast edge, across the column's direction, that would show the width as well.

    The squared change of the model by sigma, once the other parameters have done what they can, is summed over the
    volume. A flat edge of height 1 and area A brings A / (4 sqrt(pi) sigma): the integral of (u phi(u))² / sigma.
    """
    width = fit.state.in_plane_mm if column == IN_PLANE else fit.state.axial_mm
    sigma = width / FWHM_PER_SIGMA
    by_sigma = 2.0 * sigma * fit.jacobian[:, column]
    others = np.delete(fit.jacobian, column, axis=1)
    left = by_sigma - others @ solve_damped(others, by_sigma)
    contrast = max(abs(fit.state.scale) * level, 1e-300)
    return float(left @ left) * point_mm3 * 4.0 * np.sqrt(np.pi) * sigma / contrast**2


def _evaluated(
    values: NDArray[np.float64], points_mm: NDArray[np.float64], model: ReferenceModel, state: State, rough: bool
) -> tuple[State, Sampled, NDArray[np.float64], NDArray[np.float64]]:
    """The state with its best scale and offset, the model's samples, residuals and Jacobian."""
    sampled = model.sample(
        points_mm,
        motion=state.motion,
        in_plane_mm=state.in_plane_mm,
        axial_mm=state.axial_mm,
        derivatives=True,
        rough=rough,
    )
    assert sampled.gradient is not None
    assert sampled.turned is not None
    assert sampled.in_plane is not None
    assert sampled.axial is not None
    value = sampled.value
    centred = value - value.mean()
    spread = float(centred @ centred)
    if spread <= 0.0:
        raise MeasurementError("the reference does not reach the image: nothing of it lies on measured voxels")
    scale = float(centred @ values) / spread
    offset = float(values.mean() - scale * value.mean())
    jacobian = np.empty((values.size, 10))
    jacobian[:, :6] = scale * motion_columns(sampled.gradient, points_mm, state.motion)
    jacobian[:, 3:6] += scale * sampled.turned
    jacobian[:, IN_PLANE] = scale * sampled.in_plane
    jacobian[:, AXIAL] = scale * sampled.axial
    jacobian[:, 8] = value
    jacobian[:, 9] = 1.0
    return replace(state, scale=scale, offset=offset), sampled, values - scale * value - offset, jacobian


def _stepped(state: State, change: NDArray[np.float64], narrowest_mm: float) -> State:
    shift, turn = change[:3], change[3:6]
    shift = shift * min(1.0, 15.0 / max(float(np.linalg.norm(shift)), 1e-12))
    turn = turn * min(1.0, 0.15 / max(float(np.linalg.norm(turn)), 1e-12))
    widths = []
    for width, by in ((state.in_plane_mm, change[IN_PLANE]), (state.axial_mm, change[AXIAL])):
        square = width**2 + FWHM_PER_SIGMA**2 * float(by)
        limited = float(np.clip(square, 0.4 * width**2, 2.5 * width**2))
        widths.append(float(np.clip(np.sqrt(limited), narrowest_mm, WIDEST_MM)))
    return replace(state, motion=state.motion.moved(shift, turn), in_plane_mm=widths[0], axial_mm=widths[1])


def _largest_move(before: State, after: State, radius_mm: float) -> float:
    shift = float(np.linalg.norm(after.motion.translation_mm - before.motion.translation_mm))
    turned = after.motion.rotation @ before.motion.rotation.T
    angle = float(np.arccos(np.clip((np.trace(turned) - 1.0) / 2.0, -1.0, 1.0)))
    # arccos knows no angle below 1e-8; a turn matters by how far it moves the object's edge.
    return max(
        shift, angle * radius_mm, abs(after.in_plane_mm - before.in_plane_mm), abs(after.axial_mm - before.axial_mm)
    )
