"""Uncertainty from the data themselves: delete-one-block jackknife, t intervals, and the comparison of two halves.

Image noise is correlated between voxels, so the curvature of a white-noise fit promises too much. Blocks of voxels
that are wider than the noise's correlation are nearly independent: leaving out one block at a time shows how far the
result moves (Tukey's jackknife; delete-a-group jackknife in the survey literature).
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import stats

MINIMUM_BLOCKS = 12
"""With fewer blocks the error of the error is so large that no se is given at all."""

_SINGULAR = 1e-10


@dataclass(frozen=True)
class Jackknife:
    """Result of a delete-one-block jackknife.

    `se` and `df` have shape (parameters,); both are None with fewer than 12 blocks, or where leaving out a block
    leaves a parameter undetermined. `leave_one_out` has shape (blocks, parameters), or None with the same condition.
    """

    se: NDArray[np.float64] | None
    df: NDArray[np.float64] | None
    blocks: int
    leave_one_out: NDArray[np.float64] | None


@dataclass(frozen=True)
class Halves:
    """One fit's parameters from two halves of the data: arrays of shape (parameters,); `se` is None with few blocks."""

    first: NDArray[np.float64]
    second: NDArray[np.float64]
    difference: NDArray[np.float64]
    se: NDArray[np.float64] | None


def jackknife(leave_one_out: ArrayLike) -> tuple[NDArray[np.float64] | None, float | None]:
    """Standard error and degrees of freedom from estimates that each leave out one block.

    Parameters
    ----------
    leave_one_out
        Shape (blocks,) or (blocks, parameters), any unit: the estimate without block k.

    Returns
    -------
    se, df
        se = sqrt((K - 1) / K · sum (estimate_k − mean)²), in the same unit, shape () or (parameters,); df = K − 1.
        Both None with fewer than 12 blocks.

    Raises
    ------
    ValueError
        If an estimate is not finite, or the array is neither 1-D nor 2-D.

    Notes
    -----
    Source of the formula: Tukey 1958; Efron and Tibshirani, An Introduction to the Bootstrap, chapter 11.

    Examples
    --------
    >>> se, df = jackknife([1.0, 2.0] * 6)
    >>> round(float(se), 4), df
    (1.6583, 11.0)
    """
    estimates = np.asarray(leave_one_out, dtype=np.float64)
    if estimates.ndim not in (1, 2):
        raise ValueError(f"leave_one_out must have 1 or 2 axes, got {estimates.ndim}")
    if not np.all(np.isfinite(estimates)):
        raise ValueError("leave_one_out must be finite")
    count = estimates.shape[0]
    if count < MINIMUM_BLOCKS:
        return None, None
    spread = np.sum((estimates - estimates.mean(axis=0)) ** 2, axis=0)
    return np.asarray(np.sqrt((count - 1) / count * spread)), float(count - 1)


def block_jackknife(residuals: ArrayLike, *, jacobian: ArrayLike, blocks: ArrayLike) -> Jackknife:
    """Delete-one-block jackknife of a least-squares fit, one Gauss-Newton step for each block left out.

    The step is exact for models linear in their parameters, and close near the optimum of any smooth one.

    Parameters
    ----------
    residuals
        Data minus model at the optimum, shape (n,). With weights: times the square root of the weight.
    jacobian
        Derivative of the model by the parameters there, shape (n, parameters), weighted alike.
    blocks
        Integer label of each datum's block, shape (n,). Negative: in no block, never left out.

    Returns
    -------
    Jackknife
        Standard errors in the parameters' units.

    Raises
    ------
    ValueError
        If the shapes do not fit each other or a value is not finite.

    Notes
    -----
    Without block k the estimate moves by −(JᵀJ − J_kᵀJ_k)⁻¹ J_kᵀ r_k. The degrees of freedom count how many blocks
    truly speak: with v_k the share of a parameter's variance that block k would bring under even noise (the diagonal
    of A J_kᵀJ_k A, A = (JᵀJ)⁻¹), Satterthwaite's approximation gives (sum v)² / sum v², times (K − 1) / K. That is
    K − 1 for blocks of equal weight, and less for unequal ones.

    Examples
    --------
    >>> data = np.arange(24.0)
    >>> fit = block_jackknife(data - data.mean(), jacobian=np.ones((24, 1)), blocks=np.arange(24))
    >>> bool(np.isclose(fit.se[0], data.std(ddof=1) / np.sqrt(24))), round(fit.df[0], 6)
    (True, np.float64(23.0))
    """
    residual, design, order, labels = _checked(residuals, jacobian, blocks)
    if len(labels) < MINIMUM_BLOCKS:
        return Jackknife(None, None, len(labels), None)
    normals, gradients, scale = _block_sums(residual, design, order)
    total = design.T @ design / np.outer(scale, scale)
    inverse = _inverse(total)
    moved = np.empty((len(labels), design.shape[1]))
    shares = np.empty_like(moved)
    for k, (normal, gradient) in enumerate(zip(normals, gradients, strict=True)):
        without = _inverse(total - normal)
        if inverse is None or without is None:
            return Jackknife(None, None, len(labels), None)
        moved[k] = -without @ gradient / scale
        shares[k] = np.einsum("ij,jk,ki->i", inverse, normal, inverse)
    se, _ = jackknife(moved)
    shares = np.maximum(shares, 0.0)
    largest = np.maximum(np.sum(shares**2, axis=0), np.finfo(float).tiny)
    df = np.sum(shares, axis=0) ** 2 / largest * (len(labels) - 1) / len(labels)
    return Jackknife(se, df, len(labels), moved)


def shortfall(correlation_mm: float, *, block_mm: float) -> float:
    """Share of a sum's variance that blocks of this length keep, along one direction in which there are many.

    For a Gaussian autocorrelation of FWHM w, the mean distance of two correlated points is w / sqrt(4 pi ln 2) =
    0.339 w; that share of a block's length is correlated with its neighbours, whose covariance a jackknife leaves out.

    >>> round(shortfall(7.0, block_mm=42.0), 3)
    0.944
    """
    return max(1.0 - float(correlation_mm / np.sqrt(4.0 * np.pi * np.log(2.0)) / block_mm), 0.25)


def two_halves(residuals: ArrayLike, *, jacobian: ArrayLike, blocks: ArrayLike) -> Halves | None:
    """Compare a least-squares fit's parameters between two halves of the data: blocks of even and of odd rank.

    Parameters
    ----------
    residuals, jacobian, blocks
        As for `block_jackknife`. Blocks are ranked by their label; data in no block are in neither half.

    Returns
    -------
    Halves or None
        Offsets of each half's parameters from the common fit's (add the fit's own values), their difference, and its
        standard error by the jackknife within the halves. None where a half leaves a parameter undetermined.

    Raises
    ------
    ValueError
        If the shapes do not fit each other or a value is not finite.

    Examples
    --------
    >>> data = np.tile([1.0, 3.0], 12)
    >>> halves = two_halves(data - 2.0, jacobian=np.ones((24, 1)), blocks=np.arange(24))
    >>> round(float(halves.difference[0]), 6)
    -2.0
    """
    residual, design, order, labels = _checked(residuals, jacobian, blocks)
    if len(labels) < 2:
        return None
    normals, gradients, scale = _block_sums(residual, design, order)
    offsets: list[NDArray[np.float64]] = []
    variances: list[NDArray[np.float64]] = []
    for parity in (0, 1):
        chosen = range(parity, len(labels), 2)
        normal = sum((normals[k] for k in chosen), np.zeros_like(normals[0]))
        gradient = sum((gradients[k] for k in chosen), np.zeros_like(gradients[0]))
        inverse = _inverse(normal)
        if inverse is None:
            return None
        offset = inverse @ gradient
        moved = []
        for k in chosen:
            without = _inverse(normal - normals[k])
            if without is not None:
                moved.append(without @ (gradient - gradients[k]))
        offsets.append(offset / scale)
        if len(moved) == len(chosen):
            found = np.asarray(moved) / scale
            variances.append((len(moved) - 1) / len(moved) * np.sum((found - found.mean(axis=0)) ** 2, axis=0))
    known = len(variances) == 2 and len(labels) >= MINIMUM_BLOCKS
    se = np.sqrt(variances[0] + variances[1]) if known else None
    return Halves(offsets[0], offsets[1], offsets[0] - offsets[1], se)


def t_interval(value: float, se: float | None, df: float | None, level: float = 0.95) -> tuple[float, float] | None:
    """Two-sided interval value ± t · se by Student's t, in the unit of `value`; None where se or df is None.

    Raises
    ------
    ValueError
        If `level` is not between 0 and 1, `se` is negative or `df` is not positive.

    Examples
    --------
    >>> low, high = t_interval(6.0, 0.1, 11.0)
    >>> round(low, 4), round(high, 4)
    (5.7799, 6.2201)
    """
    if not 0.0 < level < 1.0:
        raise ValueError(f"level must lie between 0 and 1, got {level}")
    if se is None or df is None:
        return None
    if se < 0.0 or df <= 0.0:
        raise ValueError(f"se must not be negative and df must be positive, got {se} and {df}")
    half = float(stats.t.ppf(0.5 + level / 2.0, df)) * se
    return value - half, value + half


def _checked(
    residuals: ArrayLike, jacobian: ArrayLike, blocks: ArrayLike
) -> tuple[NDArray[np.float64], NDArray[np.float64], list[NDArray[np.intp]], NDArray[np.int64]]:
    residual = np.asarray(residuals, dtype=np.float64)
    design = np.ascontiguousarray(jacobian, dtype=np.float64)  # blocks gather rows
    label = np.asarray(blocks)
    if residual.ndim != 1 or design.ndim != 2 or design.shape[0] != residual.size or label.shape != residual.shape:
        raise ValueError(
            f"residuals {residual.shape}, jacobian {design.shape} and blocks {label.shape} do not fit each other"
        )
    if not np.issubdtype(label.dtype, np.integer):
        raise ValueError(f"blocks must be integers, got {label.dtype}")
    if not (np.all(np.isfinite(residual)) and np.all(np.isfinite(design))):
        raise ValueError("residuals and jacobian must be finite")
    position = np.argsort(label, kind="stable")
    labels, starts = np.unique(label[position], return_index=True)
    members = np.split(position, starts[1:]) if labels.size else []
    kept = [k for k, value in enumerate(labels) if value >= 0]
    return residual, design, [members[k] for k in kept], labels[kept].astype(np.int64)


def _block_sums(
    residual: NDArray[np.float64], design: NDArray[np.float64], members: list[NDArray[np.intp]]
) -> tuple[list[NDArray[np.float64]], list[NDArray[np.float64]], NDArray[np.float64]]:
    """Each block's normal matrix and gradient, with the columns scaled to length 1 over all data."""
    scale = np.sqrt(np.einsum("ij,ij->j", design, design))
    scale = np.where(scale > 0.0, scale, 1.0)
    normals, gradients = [], []
    for chosen in members:
        part = design[chosen]
        normals.append(part.T @ part / np.outer(scale, scale))
        gradients.append(part.T @ residual[chosen] / scale)
    return normals, gradients, scale


def _inverse(normal: NDArray[np.float64]) -> NDArray[np.float64] | None:
    """Inverse of a symmetric matrix; None where it has no reliable one."""
    values, vectors = np.linalg.eigh(normal)
    if values[0] <= _SINGULAR * values[-1] or values[-1] <= 0.0:
        return None
    return np.asarray((vectors / values) @ vectors.T)
