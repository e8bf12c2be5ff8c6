"""Smoothing of a volume by a Gaussian of given widths: the one function behind every use.

Each axis is a product with the kernel's matrix (`evenblur.kernels`), cut into blocks so that the processor's matrix
multiplication does the work; long axes with narrow kernels go through the cosine transform, whichever is cheaper.
"""

from dataclasses import dataclass
from math import isfinite

import numpy as np

from evenblur.kernels import KernelFacts, kernel_facts, kernel_reach, split_matrix, transfer_function
from evenblur.products import COLUMNS_AT_ONCE, ROWS_AT_ONCE, along_columns, along_rows, axis_product
from evenblur.widths import sigma_from_fwhm

ROUTES = ("auto", "image", "fourier")

# Planes that are smoothed together: what fits into a core's second-level cache along with the result.
_CHUNK_BYTES = 1 << 20

# Nanoseconds a voxel and axis on one core, rounded from what tests/benchmarks/smoothing_speed.py measures: a matrix
# costs by its window, a split one by the length, the cosine transform (there and back) by the length's logarithm.
_NS_MATRIX, _NS_MATRIX_PER_WEIGHT = 0.2, 0.016
_NS_SPLIT, _NS_SPLIT_PER_VOXEL = 1.6, 0.0045
_NS_COSINE, _NS_COSINE_PER_DOUBLING = 1.5, 0.7
# Splitting a longer axis takes longer than it saves.
_LONGEST_SPLIT = 1024


@dataclass(frozen=True)
class Smoothing:
    """How a volume is smoothed.

    Attributes
    ----------
    fwhm_mm
        Width along each array axis, mm.
    sigma_voxels
        Sigma along each array axis, voxels.
    route
        How each array axis is done, in array order: `none`, `band` (matrix without the weights that do not count),
        `dense` (whole matrix) or `cosine` (Fourier domain).
    facts
        Negative lobe and noise factor of the kernel.
    """

    fwhm_mm: tuple[float, float, float]
    sigma_voxels: tuple[float, float, float]
    route: tuple[str, str, str]
    facts: KernelFacts


def plan_smoothing(
    shape: tuple[int, int, int],
    *,
    voxel_mm: tuple[float, float, float],
    fwhm_mm: tuple[float, float, float],
    route: str = "auto",
) -> Smoothing:
    """Kernel and route for a volume, without smoothing it.

    Parameters
    ----------
    shape
        Voxels along the three array axes.
    voxel_mm
        Voxel size along each array axis, mm.
    fwhm_mm
        Width of the Gaussian along each array axis, mm; 0 leaves the axis alone.
    route
        `image` (matrix products), `fourier` (cosine transform), or `auto`: per axis the cheaper by measured cost.
        The choice depends on shape and kernel alone, so a repeated run takes the same route.

    Returns
    -------
    Smoothing
        Widths, sigmas, route and kernel facts.

    Raises
    ------
    ValueError
        If a width is negative, a voxel size not positive, a number not finite, or the route unknown.

    >>> plan_smoothing((64, 64, 1), voxel_mm=(2.0, 2.0, 2.0), fwhm_mm=(8.0, 8.0, 0.0)).route
    ('band', 'band', 'none')
    """
    if route not in ROUTES:
        raise ValueError(f"route must be one of {', '.join(ROUTES)}, not {route!r}")
    if len(shape) != 3 or len(voxel_mm) != 3 or len(fwhm_mm) != 3:
        raise ValueError(f"shape, voxel_mm and fwhm_mm must have three entries: {shape}, {voxel_mm}, {fwhm_mm}")
    if not all(isfinite(size) and size > 0 for size in voxel_mm):
        raise ValueError(f"voxel_mm must be positive, not {tuple(voxel_mm)}")
    if not all(isfinite(width) and width >= 0 for width in fwhm_mm):
        raise ValueError(f"fwhm_mm must not be negative, not {tuple(fwhm_mm)}")
    sigmas = tuple(sigma_from_fwhm(width) / size for width, size in zip(fwhm_mm, voxel_mm, strict=True))
    lengths = tuple(int(length) for length in shape)
    routes = tuple(_axis_route(length, sigma, route) for length, sigma in zip(lengths, sigmas, strict=True))
    return Smoothing(
        fwhm_mm=_three(float(width) for width in fwhm_mm),
        sigma_voxels=_three(sigmas),
        route=_three(routes),
        facts=kernel_facts(_three(lengths), sigma_voxels=_three(sigmas)),
    )


def smooth_volume(
    volume: np.ndarray,
    *,
    voxel_mm: tuple[float, float, float],
    fwhm_mm: tuple[float, float, float],
    route: str = "auto",
) -> np.ndarray:
    """Smooth a volume by a Gaussian: every wave up to the Nyquist frequency is multiplied by exp(-sigma^2 omega^2 / 2).

    The edge rule: beyond its ends the volume goes on as its mirror image, the mirror being the outer face of the end
    voxels. Constants and totals are kept, no wave is shifted.

    The NaN rule: voxels that are NaN stay NaN and do not count for the others, whose weights are scaled up to add up
    to 1 (normalised convolution). Constants are kept, totals are not.

    Parameters
    ----------
    volume
        Three-dimensional float32 or float64 array, any axis and memory order. It is not changed.
    voxel_mm
        Voxel size along each array axis, mm.
    fwhm_mm
        Width of the Gaussian along each array axis, mm; 0 leaves the axis alone.
    route
        See `plan_smoothing`.

    Returns
    -------
    np.ndarray
        float32 array of the same shape, in the memory order of the input where that is contiguous.

    Raises
    ------
    TypeError
        If the array does not hold floating-point numbers.
    ValueError
        If it is not three-dimensional or empty, or holds infinite values (or values beyond single precision), or as
        `plan_smoothing`.

    >>> smooth_volume(np.ones((4, 5, 6)), voxel_mm=(2.0, 2.0, 2.0), fwhm_mm=(6.0, 6.0, 6.0)).round(6).max().item()
    1.0
    """
    values = np.asarray(volume)
    if values.dtype.kind != "f":
        raise TypeError(f"volume must hold floating-point numbers, not {values.dtype}")
    if values.ndim != 3 or values.size == 0:
        raise ValueError(f"volume must be a three-dimensional array with voxels, not of shape {values.shape}")
    plan = plan_smoothing(values.shape, voxel_mm=voxel_mm, fwhm_mm=fwhm_mm, route=route)
    # From here on the axes are in memory order, the last one running fastest.
    order = tuple(sorted(range(3), key=lambda axis: (-abs(values.strides[axis]), axis)))
    with np.errstate(over="ignore"):
        ordered = np.ascontiguousarray(values.transpose(order), dtype=np.float32)
    steps = tuple((plan.route[axis], plan.sigma_voxels[axis]) for axis in order)
    smoothed = _smooth_valid(ordered, steps)
    return smoothed.transpose(tuple(np.argsort(order)))


def _three(values):  # type: ignore[no-untyped-def]
    first, second, third = values
    return first, second, third


def _axis_route(length: int, sigma: float, route: str) -> str:
    if length == 1 or sigma == 0:
        return "none"
    if route == "fourier":
        return "cosine"
    window = min(length, COLUMNS_AT_ONCE + 2 * kernel_reach(length, sigma=sigma))
    costs = {"band" if window < length else "dense": _NS_MATRIX + _NS_MATRIX_PER_WEIGHT * window}
    if length <= _LONGEST_SPLIT:
        costs["split"] = _NS_SPLIT + _NS_SPLIT_PER_VOXEL * length
    if route == "auto":
        costs["cosine"] = _NS_COSINE + _NS_COSINE_PER_DOUBLING * float(np.log2(length))
    cheapest = min(costs, key=lambda name: costs[name])
    if cheapest == "split" and split_matrix(length, sigma) is None:
        del costs["split"]
        cheapest = min(costs, key=lambda name: costs[name])
    return cheapest


def _smooth_valid(volume: np.ndarray, steps: tuple[tuple[str, float], ...]) -> np.ndarray:
    """Smooth a contiguous float32 volume, NaN left out."""
    # One pass tells whether every value is finite; a sum beyond single precision only costs the second look.
    with np.errstate(over="ignore", invalid="ignore"):
        all_finite = bool(np.isfinite(np.dot(volume.reshape(-1), volume.reshape(-1))))
    missing = np.zeros(0, dtype=bool) if all_finite else np.isnan(volume)
    if not all_finite and np.isinf(volume).any():
        raise ValueError("volume holds infinite values, or values beyond single precision")
    if not missing.any():
        return _smooth_axes(volume, steps)
    if missing.all():
        return volume.copy()
    valid = ~missing
    # Taken from the mean the weights' rounding does not show, however few neighbours a voxel has: constants are kept.
    mean = np.float32(volume[valid].mean(dtype=np.float64))
    share = _smooth_axes(valid.astype(np.float32), steps)
    result = _smooth_axes(np.where(valid, volume - mean, np.float32(0)), steps)
    np.divide(result, share, out=result, where=valid)
    result += mean
    result[missing] = np.nan
    return result


def _smooth_axes(volume: np.ndarray, steps: tuple[tuple[str, float], ...]) -> np.ndarray:
    """Smooth a C-contiguous float32 volume along its three axes."""
    sizes = (ROWS_AT_ONCE, ROWS_AT_ONCE, COLUMNS_AT_ONCE)
    first, middle, last = (
        axis_product(length, kind=kind, sigma=sigma, size=size)
        for length, (kind, sigma), size in zip(volume.shape, steps, sizes, strict=True)
    )
    out = np.empty_like(volume)
    planes, rows, columns = volume.shape
    part: np.ndarray
    together = min(planes, max(1, _CHUNK_BYTES // (4 * rows * columns)))
    scratch = np.empty((together, rows, columns), dtype=np.float32)
    stored_rows = None if middle is None else middle.storage((together,), (columns,))
    stored_columns = None if last is None else last.storage((together, rows))
    for start in range(0, planes, together):
        part = volume[start : start + together]
        target = out[start : start + together]
        if middle is not None:
            aim = target if last is None else scratch[: len(part)]
            along_rows(part, product=middle, out=aim, stored=stored_rows)
            part = aim
        if last is not None:
            along_columns(part, product=last, out=target, stored=stored_columns)
        elif middle is None:
            target[...] = part
    if first is not None:
        together = min(rows, max(1, _CHUNK_BYTES // (4 * planes * columns)))
        # Rows of a plane lie far apart in memory; the products run on a compact copy of a few of them.
        compact = np.empty((together, planes, columns), dtype=np.float32)
        stored_rows = first.storage((together,), (columns,))
        for start in range(0, rows, together):
            part = out[:, start : start + together].transpose(1, 0, 2)
            if stored_rows is not None:  # a split matrix makes its own copy
                along_rows(part, product=first, out=part, stored=stored_rows)
                continue
            between = compact[: len(part)]
            between[...] = part
            along_rows(between, product=first, out=part, stored=None)
    for axis, (kind, sigma) in enumerate(steps):
        if kind == "cosine":
            out = _cosine_axis(out, axis, sigma)
    return out


def _cosine_axis(volume: np.ndarray, axis: int, sigma: float) -> np.ndarray:
    """Smooth along one axis in the Fourier domain, by the cosine transform of type II there and back."""
    from scipy import fft  # costs a quarter of a second to load, and most volumes never come here

    factors = transfer_function(volume.shape[axis], sigma=sigma).astype(np.float32)
    shape = [1, 1, 1]
    shape[axis] = -1
    waves = fft.dct(volume, type=2, axis=axis, norm="ortho", workers=1)
    waves *= factors.reshape(shape)
    return fft.idct(waves, type=2, axis=axis, norm="ortho", workers=1, overwrite_x=True)
