"""Invented phantoms with a digital reference, made by brute force and without any function of the library.

The reference is piecewise constant: the object's value at a point is that of the reference voxel that holds the point.
It is looked up on a fine grid along the measured image's axes, convolved there with the sampled Gaussian (never
narrower than three fine steps, where the sampled kernel has the stated width to 1e-6), and read off at the measured
voxels' centres, which lie on fine grid points. On axes parallel to the reference's a row of point samples has less
variance than the voxel it stands for (by step² / 12): there the fine step must be small; turned objects average it out.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

FWHM_PER_SIGMA = 2.0 * np.sqrt(2.0 * np.log(2.0))


@dataclass(frozen=True)
class Truth:
    """How an image was made: widths and shift in mm, turns about x, then y, then z in degrees, flipped axes."""

    in_plane_mm: float
    axial_mm: float
    shift_mm: tuple[float, float, float] = (0.0, 0.0, 0.0)
    turn_deg: tuple[float, float, float] = (0.0, 0.0, 0.0)
    flip: tuple[int, int, int] = (1, 1, 1)
    scale: float = 1000.0
    offset: float = 0.0


def turn_matrix(turn_deg: tuple[float, float, float]) -> NDArray[np.float64]:
    """Rz Ry Rx, written out."""
    (cx, cy, cz), (sx, sy, sz) = np.cos(np.radians(turn_deg)), np.sin(np.radians(turn_deg))
    about_x = np.array([[1, 0, 0], [0, cx, -sx], [0, sx, cx]])
    about_y = np.array([[cy, 0, sy], [0, 1, 0], [-sy, 0, cy]])
    about_z = np.array([[cz, -sz, 0], [sz, cz, 0], [0, 0, 1]])
    return about_z @ about_y @ about_x


def measured_image(
    reference: NDArray[np.float64],
    reference_voxel_mm: tuple[float, float, float],
    *,
    shape: tuple[int, int, int],
    voxel_mm: tuple[float, float, float],
    truth: Truth,
    fine_mm: float = 0.75,
) -> NDArray[np.float64]:
    """The moved reference, blurred and point-sampled: float64 of `shape`.

    The array's centre is the origin of both arrays. A point x of the reference appears at turn · (flip · x) + shift.
    """
    narrowest = min(truth.in_plane_mm, truth.axial_mm) / FWHM_PER_SIGMA
    parts = []
    for size in voxel_mm:
        split = int(np.ceil(size / min(fine_mm, narrowest / 1.25)))
        parts.append(split + 1 - split % 2)  # odd: the middle part's centre is the voxel's centre
    fine = [size / split for size, split in zip(voxel_mm, parts, strict=True)]
    sigma = [truth.in_plane_mm / FWHM_PER_SIGMA] * 2 + [truth.axial_mm / FWHM_PER_SIGMA]
    extra = [int(np.ceil(6.0 * s / size)) for s, size in zip(sigma, voxel_mm, strict=True)]
    counts = [(n + 2 * e) * split for n, e, split in zip(shape, extra, parts, strict=True)]
    axes = [(np.arange(n) - (n - 1) / 2.0) * step for n, step in zip(counts, fine, strict=True)]
    back = np.asarray(truth.flip, dtype=float)[:, None] * turn_matrix(truth.turn_deg).T
    size = np.asarray(reference_voxel_mm, dtype=float)
    half = np.array(reference.shape) / 2.0
    field = np.zeros(counts, dtype=np.float32)
    y, z = (axis - shift for axis, shift in zip(axes[1:], truth.shift_mm[1:], strict=True))
    for k, x in enumerate(axes[0] - truth.shift_mm[0]):
        plane = back[:, 0, None, None] * x + back[:, 1, None, None] * y[:, None] + back[:, 2, None, None] * z[None, :]
        index = np.floor(plane / size[:, None, None] + half[:, None, None]).astype(int)
        inside = np.all((index >= 0) & (index < np.array(reference.shape)[:, None, None]), axis=0)
        field[k][inside] = reference[tuple(index[:, inside])]
    for axis in range(3):
        step = parts[axis]
        reach = int(np.ceil(6.0 * sigma[axis] / fine[axis]))
        offsets = np.arange(-reach, reach + 1) * fine[axis]
        kernel = np.exp(-0.5 * (offsets / sigma[axis]) ** 2)
        field = ndimage.convolve1d(field, kernel / kernel.sum(), axis=axis, mode="constant")
        # Only the voxels' centres are wanted along an axis once it has been blurred.
        keep = np.arange(step // 2, counts[axis], step)[extra[axis] : extra[axis] + shape[axis]]
        field = np.take(field, keep, axis=axis)
    return truth.scale * field.astype(np.float64) + truth.offset


def voxelised(
    shape: tuple[int, int, int],
    voxel_mm: tuple[float, float, float],
    *,
    parts: list[tuple[str, tuple[float, float, float], tuple[float, float, float], float]],
) -> NDArray[np.float64]:
    """Ellipsoids and boxes (kind, centre, half axes in mm, value) painted over each other at voxel centres."""
    axes = [(np.arange(n) - (n - 1) / 2.0) * step for n, step in zip(shape, voxel_mm, strict=True)]
    x, y, z = np.meshgrid(*axes, indexing="ij")
    volume = np.zeros(shape)
    for kind, (cx, cy, cz), (a, b, c), value in parts:
        u, v, w = (x - cx) / a, (y - cy) / b, (z - cz) / c
        inside = u**2 + v**2 + w**2 <= 1.0 if kind == "ellipsoid" else np.maximum(np.abs([u, v, w]).max(axis=0), 0) <= 1
        volume[inside] = value
    return volume


def invented_head(voxel_mm: float = 2.0, *, symmetric: bool = False) -> NDArray[np.float64]:
    """A head of 110 × 130 × 90 mm: bright shell and islands, dim core, cold cavities; lopsided if not symmetric."""
    n = tuple(int(np.ceil(size / voxel_mm)) for size in (124.0, 144.0, 104.0))
    parts = [
        ("ellipsoid", (0.0, 0.0, 0.0), (55.0, 65.0, 45.0), 4.0),
        ("ellipsoid", (0.0, 0.0, 0.0), (44.0, 54.0, 34.0), 1.0),
        ("ellipsoid", (14.0, 8.0, 2.0), (8.0, 16.0, 9.0), 4.0),
        ("ellipsoid", (-14.0, 8.0, 2.0), (8.0, 16.0, 9.0), 4.0),
        ("box", (0.0, -30.0, 6.0), (6.0, 12.0, 7.0), 0.0),
        ("box", (0.0, 40.0, -10.0), (20.0, 5.0, 8.0), 4.0),
    ]
    if not symmetric:
        parts += [
            ("ellipsoid", (26.0, -20.0, 10.0), (11.0, 9.0, 12.0), 6.0),
            ("box", (-30.0, -12.0, -12.0), (6.0, 8.0, 6.0), 0.0),
        ]
    return voxelised((n[0], n[1], n[2]), (voxel_mm,) * 3, parts=parts)
