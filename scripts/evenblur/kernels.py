"""The Gaussian kernel along one axis of voxels: its transfer function, its matrix, its weights.

The kernel of a width is defined by what it does to frequencies: a wave of angular frequency `omega` (radians a voxel,
up to the Nyquist frequency pi) is multiplied by exp(-sigma^2 omega^2 / 2), which is what a continuous Gaussian would
do to it. Sampling the Gaussian's curve instead is wrong for narrow kernels: at a width of one voxel it blurs a fifth
too little.

The ends are half-sample symmetric: the image is continued by its mirror image at the outer faces of the end voxels.
The cosine waves cos(pi k (i + 1/2) / n) then are the eigenvectors of the kernel (they are the basis of the discrete
cosine transform of type II), so totals are kept and no wave is shifted.
"""

from dataclasses import dataclass
from functools import lru_cache

import numpy as np

DROPPED_WEIGHT = 2e-6
"""Weights whose absolute values add up to less than this are left out; the transfer function errs by less."""

PIECE = 16
"""Voxels in a piece of the axis, where a kernel's matrix is split into a near and a far part."""

LARGEST_RANK = 6
"""Most polynomials that describe a piece's part in the far field; more would cost what they save."""

FAR_WEIGHT = 5e-6
"""What a row of the far part may miss, as the sum of absolute values; the transfer function errs by less."""


def transfer_function(length: int, *, sigma: float) -> np.ndarray:
    """What the kernel multiplies the cosine waves k = 0 .. length - 1 by: exp(-sigma^2 omega^2 / 2).

    Parameters
    ----------
    length
        Voxels along the axis, n; wave k is cos(pi k (i + 1/2) / n), so omega = pi k / n radians a voxel.
    sigma
        Sigma of the Gaussian, voxels.

    Returns
    -------
    np.ndarray
        `length` float64 factors.

    Raises
    ------
    ValueError
        If the length is under 1, or sigma negative or not finite.

    >>> transfer_function(2, sigma=0.0).tolist()
    [1.0, 1.0]
    """
    _check(length, sigma)
    omega = np.pi * np.arange(length) / length
    return np.exp(-0.5 * (sigma * omega) ** 2)


def kernel_weights(length: int, *, sigma: float) -> np.ndarray:
    """Weights of the kernel on the ring of 2 x length voxels that mirrored ends make.

    Entry m is the weight of a voxel m places away; the second half holds the negative offsets. The weights are the
    inverse Fourier transform of the transfer function, so a narrow kernel has long tails of alternating sign.

    Parameters
    ----------
    length
        Voxels along the axis.
    sigma
        Sigma of the Gaussian, voxels.

    Returns
    -------
    np.ndarray
        2 x `length` float64 weights that add up to 1.

    Raises
    ------
    ValueError
        If the length is under 1, or sigma negative or not finite.

    >>> float(round(kernel_weights(4, sigma=0.0)[0], 6))
    1.0
    """
    _check(length, sigma)
    omega = np.pi * np.arange(length + 1) / length
    return np.fft.irfft(np.exp(-0.5 * (sigma * omega) ** 2), 2 * length)


def axis_matrix(length: int, *, sigma: float) -> np.ndarray:
    """The kernel along an axis as a matrix: smoothed = matrix @ values.

    Entry (i, j) is w[i - j] + w[i + j + 1]: the weight of voxel j and that of its mirror image.

    Parameters
    ----------
    length
        Voxels along the axis.
    sigma
        Sigma of the Gaussian, voxels.

    Returns
    -------
    np.ndarray
        Symmetric float64 matrix (`length`, `length`); every row and every column adds up to 1.

    Raises
    ------
    ValueError
        If the length is under 1, or sigma negative or not finite.

    >>> axis_matrix(1, sigma=2.0).tolist()
    [[1.0]]
    """
    weights = kernel_weights(length, sigma=sigma)
    index = np.arange(length)
    return weights[np.abs(index[:, None] - index)] + weights[index[:, None] + index + 1]


def kernel_reach(length: int, *, sigma: float, dropped: float = DROPPED_WEIGHT) -> int:
    """How many voxels away the kernel's weights still count.

    Parameters
    ----------
    length
        Voxels along the axis.
    sigma
        Sigma of the Gaussian, voxels.
    dropped
        Bound for the absolute values of all weights further away, together.

    Returns
    -------
    int
        The reach, at most `length` - 1 (then nothing is left out).

    Raises
    ------
    ValueError
        If the length is under 1, or sigma negative or not finite.

    >>> kernel_reach(256, sigma=2.0) < 12
    True
    """
    weights = np.abs(kernel_weights(length, sigma=sigma)[: length + 1])
    beyond = 2.0 * np.cumsum(weights[::-1])[::-1]  # beyond[m]: weights at m and further, both sides
    enough = np.flatnonzero(beyond[1:] <= dropped)
    return min(int(enough[0]), length - 1) if enough.size else length - 1


@lru_cache(maxsize=32)
def banded_matrix(length: int, sigma: float) -> tuple[int, np.ndarray]:
    """The kernel's matrix in single precision without the weights that do not count, and its reach.

    What rounding and leaving out took from a row goes to its diagonal: constants and totals stay exact to the last
    bit of single precision, and the matrix stays symmetric.

    Parameters
    ----------
    length
        Voxels along the axis.
    sigma
        Sigma of the Gaussian, voxels.

    Returns
    -------
    tuple
        The reach in voxels, and the read-only float32 matrix (`length`, `length`).

    Raises
    ------
    ValueError
        If the length is under 1, or sigma negative or not finite.

    >>> banded_matrix(3, 0.0)[1].tolist()
    [[1.0, 0.0, 0.0], [0.0, 1.0, 0.0], [0.0, 0.0, 1.0]]
    """
    reach = kernel_reach(length, sigma=sigma)
    index = np.arange(length)
    exact = axis_matrix(length, sigma=sigma)
    exact[np.abs(index[:, None] - index) > reach] = 0.0
    single = exact.astype(np.float32)
    single[index, index] += (1.0 - single.sum(axis=1, dtype=np.float64)).astype(np.float32)
    single.setflags(write=False)
    return reach, single


@dataclass(frozen=True)
class SplitMatrix:
    """The matrix of a narrow kernel in two parts: whole among neighbouring pieces of the axis, of low rank beyond.

    The long tails of a narrow kernel alternate in sign and are smooth otherwise. Over a piece of `PIECE` voxels a few
    polynomials of alternating sign describe what it gives to, and takes from, all pieces that are not its neighbours:
    matrix = near + basis @ exchange @ basis.T, with the basis laid out piece by piece.

    Attributes
    ----------
    rank
        Number of polynomials a piece.
    near
        float32 (`length`, `length`), zero beyond neighbouring pieces.
    basis
        float32 (`pieces`, `PIECE`, `rank`); rows beyond the end of the axis are zero.
    exchange
        float32 (`pieces` x `rank`, `pieces` x `rank`), symmetric.
    """

    rank: int
    near: np.ndarray
    basis: np.ndarray
    exchange: np.ndarray


@lru_cache(maxsize=32)
def split_matrix(length: int, sigma: float) -> "SplitMatrix | None":
    """The kernel's matrix in two parts, or None if `LARGEST_RANK` polynomials a piece do not describe the far one.

    The part left out is bounded as in `kernel_reach`; what it and rounding took from a row goes to the diagonal.

    Parameters
    ----------
    length
        Voxels along the axis.
    sigma
        Sigma of the Gaussian, voxels.

    Returns
    -------
    SplitMatrix or None
        Single-precision parts, to be left as they are.

    Raises
    ------
    ValueError
        If the length is under 1, or sigma negative or not finite.

    >>> split_matrix(128, 0.8).rank <= LARGEST_RANK
    True
    """
    exact = axis_matrix(length, sigma=sigma)
    pieces = -(-length // PIECE)
    piece = np.arange(length) // PIECE
    far = np.where(np.abs(piece[:, None] - piece) > 1, exact, 0.0)
    full = np.linalg.qr(_alternating_polynomials(PIECE))[0]
    short = length - (pieces - 1) * PIECE
    last = np.zeros_like(full)
    few = np.linalg.qr(_alternating_polynomials(short))[0]
    last[:short, : few.shape[1]] = few
    for rank in range(1, LARGEST_RANK + 1):
        basis = np.stack([full[:, :rank]] * (pieces - 1) + [last[:, :rank]])
        spread = np.zeros((pieces * PIECE, pieces * rank))
        for index in range(pieces):
            spread[index * PIECE : (index + 1) * PIECE, index * rank : (index + 1) * rank] = basis[index]
        spread = spread[:length]
        exchange = spread.T @ far @ spread
        if np.abs(far - spread @ exchange @ spread.T).sum(axis=1).max() <= FAR_WEIGHT:
            break
    else:
        return None
    near = (exact - far).astype(np.float32)
    kept = near.sum(axis=1, dtype=np.float64) + spread @ (exchange @ spread.sum(axis=0))
    near[np.diag_indices(length)] += (1.0 - kept).astype(np.float32)
    return SplitMatrix(rank, near, basis.astype(np.float32), exchange.astype(np.float32))


def _alternating_polynomials(count: int) -> np.ndarray:
    """Legendre polynomials over `count` voxels, times (-1)^i: columns by degree, as many as voxels at most."""
    index = np.arange(count)
    places = (2 * index + 1 - count) / count
    columns = min(count, LARGEST_RANK)
    return np.polynomial.legendre.legvander(places, columns - 1) * (1.0 - 2.0 * (index % 2))[:, None]


@dataclass(frozen=True)
class KernelFacts:
    """What the record says about a kernel.

    Attributes
    ----------
    largest_negative_lobe
        The most negative weight as a share of the central one; 0 where there is none.
    noise_variance_factor
        What the variance of white noise is multiplied by: the sum of the squared weights, far from the ends.
    """

    largest_negative_lobe: float
    noise_variance_factor: float


def kernel_facts(shape: tuple[int, int, int], *, sigma_voxels: tuple[float, float, float]) -> KernelFacts:
    """Negative lobe and noise factor of the three-dimensional kernel.

    Parameters
    ----------
    shape
        Voxels along the three array axes.
    sigma_voxels
        Sigma along each array axis, voxels.

    Returns
    -------
    KernelFacts
        Of the product of the three axes' kernels.

    Raises
    ------
    ValueError
        If a length is under 1, or a sigma negative or not finite.

    >>> kernel_facts((8, 8, 8), sigma_voxels=(0.0, 0.0, 0.0)).noise_variance_factor
    1.0
    """
    lobe, factor = 0.0, 1.0
    for length, sigma in zip(shape, sigma_voxels, strict=True):
        if length == 1 or sigma == 0:
            _check(length, sigma)
            continue
        weights = kernel_weights(length, sigma=sigma)
        # In the product the largest negative weight has one negative factor, the other two being central.
        lobe = min(lobe, float(weights.min() / weights[0]))
        factor *= float(np.sum(weights**2))
    return KernelFacts(largest_negative_lobe=round(lobe, 6) + 0.0, noise_variance_factor=float(f"{factor:.6g}"))


def _check(length: int, sigma: float) -> None:
    if length < 1:
        raise ValueError(f"length must be at least 1 voxel, not {length}")
    if not (np.isfinite(sigma) and sigma >= 0):
        raise ValueError(f"sigma must be a finite number of voxels of at least 0, not {sigma}")
