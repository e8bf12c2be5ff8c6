"""Small sources: found in the image, and fitted together as Gaussians of one in-plane and one axial width."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from evenblur.phantoms.base import MeasurementError
from evenblur.phantoms.fitting import Fitted, least_squares
from evenblur.widths import sigma_from_fwhm

COMMON = 2
"""The first parameters: sigma in-plane and axial (mm). Then five for each source: x, y, z (mm), peak, background."""
PER_SOURCE = 5
WINDOW = 4.0
"""Sigmas from a source's centre to the edge of its window."""
LARGEST_FWHM_MM = 40.0
MOST_SOURCES = 60


@dataclass(frozen=True)
class Sources:
    """First values: centres (sources, 3; mm), peaks above the background, background, noise, and rough width (mm)."""

    centres_mm: NDArray[np.float64]
    peaks: NDArray[np.float64]
    background: float
    noise: float
    fwhm_mm: float


@dataclass(frozen=True)
class PointFit:
    """Optimum with the windows' voxels: index in the flattened image, owner source, and positions (3, n; mm)."""

    fitted: Fitted
    values: NDArray[np.float64]
    points: NDArray[np.float64]
    index: NDArray[np.intp]
    owner: NDArray[np.intp]
    count: int

    def source(self, which: int) -> NDArray[np.float64]:
        """x, y, z (mm), peak and background of a source."""
        first = COMMON + PER_SOURCE * which
        return self.fitted.parameters[first : first + PER_SOURCE]

    def offsets(self) -> NDArray[np.float64]:
        """Each voxel's position from its own source's centre, shape (3, n), mm."""
        centres = self.fitted.parameters[COMMON:].reshape(-1, PER_SOURCE)[:, :3]
        return np.asarray(self.points - centres[self.owner].T)


def find_sources(volume: NDArray[np.float64], *, voxel_mm: tuple[float, float, float]) -> Sources:
    """Find small bright sources, each at least a fifth as bright as the brightest.

    Parameters
    ----------
    volume
        Image, shape (x, y, z).
    voxel_mm
        Voxel sizes, mm.

    Returns
    -------
    Sources

    Raises
    ------
    MeasurementError
        If nothing stands out, or what does is too large for a point source, or crosses the image.
    """
    background = float(np.median(volume))
    noise = 1.4826 * float(np.median(np.abs(volume - background)))
    smooth = ndimage.gaussian_filter(volume, 0.7, mode="nearest")
    height = float(smooth.max()) - background
    if height <= 0.0 or float(volume.max()) - background < 8.0 * noise:
        raise MeasurementError("no source stands out of the background")
    labels, count = ndimage.label(smooth > background + 0.5 * height)
    brightest = labels == labels[np.unravel_index(int(np.argmax(smooth)), volume.shape)]
    size = float(np.count_nonzero(brightest) * np.prod(voxel_mm))
    fwhm = 2.0 * (3.0 * size / (4.0 * np.pi)) ** (1.0 / 3.0)
    extent = [np.flatnonzero(brightest.any(axis=tuple({0, 1, 2} - {axis}))) for axis in range(3)]
    if any(e[0] == 0 and e[-1] == n - 1 for e, n in zip(extent, volume.shape, strict=True)):
        raise MeasurementError("the bright object crosses the whole image: it is no point source")
    if fwhm > LARGEST_FWHM_MM or count > 4 * MOST_SOURCES:
        raise MeasurementError(f"the bright object is about {fwhm:.0f} mm across: it is no point source")
    reach = [max(1, round(0.7 * fwhm / step)) for step in voxel_mm]
    highest = ndimage.maximum_filter(smooth, size=[2 * r + 1 for r in reach], mode="nearest")
    peaks = (smooth == highest) & (smooth > background + max(0.2 * height, 6.0 * noise * 0.5))
    places, number = ndimage.label(ndimage.binary_dilation(peaks, iterations=1))
    if number > MOST_SOURCES:
        raise MeasurementError(f"{number} bright spots are seen: this is no image of a few point sources")
    centres, heights = [], []
    for label in range(1, number + 1):
        where = np.argwhere((places == label) & peaks)
        top = where[int(np.argmax(smooth[tuple(where.T)]))]
        box = tuple(slice(max(0, k - r), k + r + 1) for k, r in zip(top, reach, strict=True))
        weight = np.maximum(volume[box] - background - 0.3 * (smooth[tuple(top)] - background), 0.0)
        grid = np.indices(weight.shape)
        total = max(float(weight.sum()), 1e-300)
        first = [b.start for b in box]
        centres.append([(first[k] + float((grid[k] * weight).sum()) / total) * voxel_mm[k] for k in range(3)])
        heights.append(float(smooth[tuple(top)]) - background)
    return Sources(np.array(centres), np.array(heights), background, noise, fwhm)


def ball_nodes(diameter_mm: float) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Points (n, 3; mm) and weights (sum 1) that stand for a uniform ball: exact for polynomials of degree 7.

    Lebedev's 26 directions times four Gauss nodes along the radius; one point for diameter 0.
    """
    if diameter_mm <= 0.0:
        return np.zeros((1, 3)), np.ones(1)
    grid = np.array([[i, j, k] for i in (-1, 0, 1) for j in (-1, 0, 1) for k in (-1, 0, 1) if i or j or k], dtype=float)
    kind = np.abs(grid).sum(axis=1)
    direction_weight = np.where(kind == 1, 1 / 21, np.where(kind == 2, 4 / 105, 9 / 280))
    directions = grid / np.sqrt(kind)[:, None]
    node, weight = np.polynomial.legendre.leggauss(5)
    radius = 0.5 * (node + 1.0)
    radial_weight = 1.5 * weight * radius**2
    points = (radius[:, None, None] * directions[None]).reshape(-1, 3) * diameter_mm / 2.0
    return points, (radial_weight[:, None] * direction_weight[None]).ravel()


def fit_sources(
    volume: NDArray[np.float64],
    *,
    voxel_mm: tuple[float, float, float],
    sources: Sources,
    diameter_mm: float,
) -> PointFit:
    """Fit all sources together: two common widths, and a centre, a peak and a background for each.

    Parameters
    ----------
    volume
        Image, shape (x, y, z).
    voxel_mm
        Voxel sizes, mm.
    sources
        From `find_sources`.
    diameter_mm
        Diameter of the (spherical) sources; 0 for points.

    Returns
    -------
    PointFit

    Raises
    ------
    MeasurementError
        If the fit does not come to rest at widths that make sense.
    """
    sigma = sigma_from_fwhm(sources.fwhm_mm)
    parameters = np.concatenate(
        [[sigma, sigma]]
        + [[*centre, peak, sources.background] for centre, peak in zip(sources.centres_mm, sources.peaks, strict=True)]
    )
    nodes = ball_nodes(diameter_mm)
    result: PointFit | None = None
    for _ in range(5):
        index, owner, points = _windows(volume.shape, voxel_mm, parameters)
        values = volume.ravel()[index]

        def model(
            p: NDArray[np.float64],
            values: NDArray[np.float64] = values,
            points: NDArray[np.float64] = points,
            owner: NDArray[np.intp] = owner,
        ) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
            prediction, jacobian = evaluate(p, points, owner, nodes)
            return values - prediction, jacobian

        lower, upper = np.full(parameters.size, -np.inf), np.full(parameters.size, np.inf)
        lower[:COMMON] = 0.15 * min(voxel_mm)
        upper[:COMMON] = sigma_from_fwhm(1.5 * LARGEST_FWHM_MM)
        fitted = least_squares(model, parameters, lower=lower, upper=upper)
        before, parameters = parameters[:COMMON], fitted.parameters
        result = PointFit(fitted, values, points, index, owner, len(sources.centres_mm))
        if np.all(np.abs(parameters[:COMMON] / before - 1.0) < 0.03):
            break
    assert result is not None
    if not result.fitted.converged or np.any(parameters[:COMMON] <= 0.16 * min(voxel_mm)):
        raise MeasurementError("no blurred point source could be fitted to the image")
    return result


def _windows(
    shape: tuple[int, ...], voxel_mm: tuple[float, float, float], parameters: NDArray[np.float64]
) -> tuple[NDArray[np.intp], NDArray[np.intp], NDArray[np.float64]]:
    """Voxels within 4 sigmas of a source (at least 3 voxels); each belongs to the source nearest in sigmas."""
    sigmas = np.array([parameters[0], parameters[0], parameters[1]])
    reach = np.maximum(WINDOW * sigmas, 3.0 * np.array(voxel_mm))
    best: dict[str, NDArray[np.float64]] = {"distance": np.full(shape, np.inf), "owner": np.full(shape, -1.0)}
    for which, centre in enumerate(parameters[COMMON:].reshape(-1, PER_SOURCE)[:, :3]):
        box = []
        for c, r, step, n in zip(centre, reach, voxel_mm, shape, strict=True):
            box.append(
                slice(int(np.clip(np.floor((c - r) / step), 0, n)), int(np.clip(np.ceil((c + r) / step) + 1, 0, n)))
            )
        axes = [np.arange(b.start, b.stop) * step - c for b, step, c in zip(box, voxel_mm, centre, strict=True)]
        distance = sum((a / r) ** 2 for a, r in zip(np.meshgrid(*axes, indexing="ij", sparse=True), reach, strict=True))
        near = (distance < 1.0) & (distance < best["distance"][tuple(box)])
        best["distance"][tuple(box)][near] = distance[near]
        best["owner"][tuple(box)][near] = which
    index = np.flatnonzero(best["owner"].ravel() >= 0)
    if index.size < 4 * parameters.size:
        raise MeasurementError("the sources lie too close to the image's border, or cover too few voxels")
    where = np.unravel_index(index, shape)
    points = np.stack([w * step for w, step in zip(where, voxel_mm, strict=True)])
    return index, best["owner"].ravel()[index].astype(np.intp), points


def evaluate(
    parameters: NDArray[np.float64],
    points: NDArray[np.float64],
    owner: NDArray[np.intp],
    nodes: tuple[NDArray[np.float64], NDArray[np.float64]],
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """The model's values (n,) and Jacobian (n, parameters): every source adds wherever it is within ten sigmas."""
    sigma, sigma_z = parameters[:COMMON]
    scale = np.array([sigma, sigma, sigma_z])
    values = np.zeros(points.shape[1])
    jacobian = np.zeros((points.shape[1], parameters.size), order="F")
    for which, (x, y, z, peak, background) in enumerate(parameters[COMMON:].reshape(-1, PER_SOURCE)):
        first = COMMON + PER_SOURCE * which
        mine = owner == which
        values[mine] += background
        jacobian[mine, first + 4] = 1.0
        all_offsets = points - np.array([x, y, z])[:, None]
        near = np.flatnonzero(np.sum((all_offsets / scale[:, None]) ** 2, axis=0) < 100.0)
        offset = all_offsets[:, near]
        total = np.zeros(near.size)
        slopes = np.zeros((3, near.size))
        widths = np.zeros((3, near.size))
        for node, weight in zip(*nodes, strict=True):
            t = (offset - node[:, None]) / scale[:, None]
            part = weight * np.exp(-0.5 * np.sum(t**2, axis=0))
            total += part
            slopes += part * t / scale[:, None]
            widths += part * t**2 / scale[:, None]
        values[near] += peak * total
        jacobian[near, 0] += peak * (widths[0] + widths[1])
        jacobian[near, 1] += peak * widths[2]
        jacobian[near, first : first + 3] = peak * slopes.T
        jacobian[near, first + 3] = total
    return values, jacobian
