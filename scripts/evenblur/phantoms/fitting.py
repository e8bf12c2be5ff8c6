"""Levenberg-Marquardt for the phantoms' models: many data, few parameters, derivatives given."""

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Model = Callable[[NDArray[np.float64]], tuple[NDArray[np.float64], NDArray[np.float64]]]
"""Parameters -> residuals (n,) and the model's Jacobian (n, parameters)."""


@dataclass(frozen=True)
class Fitted:
    """Parameters at the optimum, with residuals (data minus model) and the model's Jacobian there."""

    parameters: NDArray[np.float64]
    residuals: NDArray[np.float64]
    jacobian: NDArray[np.float64]
    converged: bool


def least_squares(
    model: Model,
    start: NDArray[np.float64],
    *,
    lower: NDArray[np.float64] | None = None,
    upper: NDArray[np.float64] | None = None,
    rounds: int = 40,
    tolerance: float = 1e-6,
) -> Fitted:
    """Minimise the sum of squared residuals.

    Parameters
    ----------
    model
        Gives residuals (data minus model) and the model's Jacobian.
    start
        First parameters, shape (parameters,).
    lower, upper
        Bounds, same shape; steps are cut there.
    rounds
        Largest number of steps.
    tolerance
        Stop when a step would lower the sum of squares by less than this share of it, and moves each parameter by
        less than a thousandth of its own white-noise error.

    Returns
    -------
    Fitted

    Raises
    ------
    ValueError
        If the model is not finite at the start.

    Notes
    -----
    Marquardt 1963, with the damping scaled by the diagonal of JᵀJ.

    Examples
    --------
    >>> x = np.linspace(0.0, 1.0, 50)
    >>> def decay(p):
    ...     value = np.exp(-p[0] * x)
    ...     return np.exp(-3.0 * x) - value, (-x * value)[:, None]
    >>> round(float(least_squares(decay, np.array([1.0])).parameters[0]), 6)
    3.0
    """
    low = np.full_like(start, -np.inf) if lower is None else lower
    high = np.full_like(start, np.inf) if upper is None else upper
    current = np.clip(start, low, high)
    residuals, jacobian = model(current)
    cost = float(residuals @ residuals)
    if not np.isfinite(cost):
        raise ValueError("the model is not finite at the start")
    damping, converged = 1e-4, False
    for _ in range(rounds):
        normal, gradient = jacobian.T @ jacobian, jacobian.T @ residuals
        diagonal = np.diag(normal)
        # Widths and amplitudes differ by the image's unit; in units of each column's own length they do not.
        length = np.sqrt(np.where(diagonal > 0.0, diagonal, 1.0))
        better = False
        for _ in range(12):
            scaled = normal / np.outer(length, length) + damping * np.eye(length.size)
            step = np.linalg.solve(scaled, gradient / length) / length
            proposal = np.clip(current + step, low, high)
            step = proposal - current
            expected = abs(float(step @ gradient))
            new_residuals, new_jacobian = model(proposal)
            new_cost = float(new_residuals @ new_residuals)
            if np.isfinite(new_cost) and new_cost <= cost:
                better = True
                break
            if expected <= 1e-12 * cost:
                break
            damping = min(max(damping, 1e-4) * 8.0, 1e12)
        if not better:
            # No step helps any more: at the rounding of the sum of squares, which is the optimum.
            converged = True
            break
        small = bool(np.all(step**2 * diagonal <= 1e-6 * cost / max(residuals.size, 1)))
        gained = cost - new_cost
        current, residuals, jacobian, cost = proposal, new_residuals, new_jacobian, new_cost
        damping = max(damping / 10.0, 1e-10)
        if gained <= tolerance * cost and small:
            converged = True
            break
    return Fitted(current, residuals, jacobian, converged)
