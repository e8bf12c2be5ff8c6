"""Where is the reference in the measured image? A coarse search over flips, turns and shifts, before any fine fit."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import fft, ndimage

from evenblur.phantoms.base import MeasurementError
from evenblur.phantoms.reference_fit import Fit, State, fit_state
from evenblur.phantoms.reference_model import MARGIN_WIDTHS, ReferenceModel
from evenblur.phantoms.rigid import FLIPS, Motion, voxel_centres
from evenblur.widths import FWHM_PER_SIGMA

_TURN_DEG = 6.0
_GUESSED_WIDTH_MM = 6.0
_MOST_POINTS = 6_000
_DISTINCT = 16.0
"""Gain in independent residuals' variance (a squared number of standard errors) that tells two flips apart."""

_HOPEFUL = 5.0
"""After three steps a flip with this many times the best residuals is left as it is."""


@dataclass(frozen=True)
class CoarseImage:
    """The measured image, smoothed and thinned: `values` (n,) at `points_mm` (n, 3) of a lattice of shape `shape`.

    `valid` (n,) is false where voxels without a value came into the smoothing.
    """

    values: NDArray[np.float64]
    points_mm: NDArray[np.float64]
    valid: NDArray[np.bool_]
    shape: tuple[int, int, int]
    step_mm: NDArray[np.float64]
    width_mm: float

    @property
    def point_mm3(self) -> float:
        """Volume that a point stands for, mm³."""
        return float(np.prod(self.step_mm))


@dataclass(frozen=True)
class Found:
    """The best coarse fit, the next best flip, and whether the two can be told apart.

    `unexplained` is the share of the smoothed image's variance that the best fit leaves; `mirror_ratio` is the residual
    square sum of the best flip over that of the next best, between 0 and 1; `rivals` are the flips that fit as well as
    the chosen one.
    """

    fit: Fit
    unexplained: float
    mirror_ratio: float
    rivals: tuple[tuple[int, int, int], ...]
    image: CoarseImage


def coarse_image(volume: NDArray[np.float64], *, voxel_mm: tuple[float, float, float], step_mm: float) -> CoarseImage:
    """Smooth an image to twice the step and keep every k-th voxel, so that nothing is interpolated."""
    stride = [max(1, round(step_mm / size)) for size in voxel_mm]
    width = 2.0 * max(count * size for count, size in zip(stride, voxel_mm, strict=True))
    sigmas = [width / FWHM_PER_SIGMA / size for size in voxel_mm]
    first = [(count - 1) % step // 2 for count, step in zip(volume.shape, stride, strict=True)]
    thin = tuple(slice(low, None, step) for low, step in zip(first, stride, strict=True))
    missing = ~np.isfinite(volume)
    valid = np.ones(volume[thin].shape, dtype=bool)
    if missing.any():
        nearest = ndimage.distance_transform_edt(missing, return_distances=False, return_indices=True)
        volume = volume[tuple(nearest)]
        touched = ndimage.gaussian_filter(missing.astype(np.float32), sigmas, mode="nearest", truncate=4.0)
        valid = touched[thin] < 0.01
    smooth = ndimage.gaussian_filter(volume, sigmas, mode="nearest", truncate=4.0)[thin]
    axes = [
        centres[low::step]
        for centres, low, step in zip(voxel_centres(volume.shape, voxel_mm), first, stride, strict=True)
    ]
    points = np.stack(np.meshgrid(*axes, indexing="ij"), axis=-1).reshape(-1, 3)
    steps = np.array(stride) * np.asarray(voxel_mm, dtype=np.float64)
    return CoarseImage(smooth.ravel(), points, valid.ravel(), smooth.shape, steps, width)


def search_step_mm(model: ReferenceModel) -> float:
    """Step of the coarse search, mm: a 24th of the object, but not over 8 mm."""
    return float(np.clip(np.max(model.extent_mm) / 24.0, 1.0, 8.0))


def find_motion(image: CoarseImage, *, model: ReferenceModel) -> Found:
    """Find flip, turn and shift of the reference, and a first guess of the widths, on a smoothed image.

    Every flip is tried straight and turned by 6 degrees about each axis; the shift of each comes from a
    cross-correlation over the whole image, so it may be of any size. Each flip's best start is then fitted by least
    squares on points that all flips share.

    Raises
    ------
    MeasurementError
        If no flip fits with positive contrast.
    """
    blurred = float(np.hypot(image.width_mm, _GUESSED_WIDTH_MM))
    starts = _starts(image, model, blurred)
    margin = min(MARGIN_WIDTHS * blurred, 2.5 * image.width_mm)
    shared = np.zeros(image.values.shape, dtype=bool)
    for motion in starts:
        shared |= model.within(image.points_mm, motion=motion, margin_mm=margin)
    chosen = np.flatnonzero(shared & image.valid)
    if chosen.size < 100:
        raise MeasurementError("the image does not hold enough of the reference to find it")
    weight = int(np.ceil(chosen.size / _MOST_POINTS))
    chosen = chosen[::weight]
    values, points = image.values[chosen], image.points_mm[chosen]
    first = [
        _coarse_fit(image, values, points, model=model, start=State(at, blurred, blurred, 1.0, 0.0), steps=3)
        for at in starts
    ]
    hopeful = [fit for fit in first if fit.state.scale > 0.0]
    if not hopeful:
        raise MeasurementError("the image is nowhere brighter where the reference is: it does not show the reference")
    least = min(fit.square_sum for fit in hopeful)
    upright = [
        _coarse_fit(image, values, points, model=model, start=fit.state, steps=10)
        if fit.square_sum < _HOPEFUL * least
        else fit
        for fit in hopeful
    ]
    spread = float(np.var(values)) * values.size
    # A floor of a millionth of the image's variance: below it only rounding would decide between flips.
    sums = np.array([fit.square_sum for fit in upright]) + 1e-6 * spread
    independent = float(np.clip(chosen.size * weight * image.point_mm3 / image.width_mm**3, 12.0, values.size))
    best = int(np.argmin(sums))
    alike = [k for k in range(len(upright)) if independent * (sums[k] / sums[best] - 1.0) < _DISTINCT]
    # Where the data do not speak for a flip, the header's own orientation stands.
    straight = [k for k in alike if upright[k].state.motion.flip == (1, 1, 1)]
    taken = straight[0] if straight else best
    others = [float(sums[taken] / sums[k]) for k in range(len(upright)) if k != taken]
    rivals = tuple(upright[k].state.motion.flip for k in alike if k != taken)
    unexplained = upright[taken].square_sum / spread if spread > 0.0 else 1.0
    return Found(upright[taken], unexplained, min(1.0, max(others, default=0.0)), rivals, image)


def _starts(image: CoarseImage, model: ReferenceModel, blurred_mm: float) -> list[Motion]:
    """For each flip the turn, and the shift, with the highest correlation."""
    reach = float(np.linalg.norm(model.extent_mm)) / 2.0 + blurred_mm
    half = np.ceil(reach / image.step_mm).astype(int)
    patch_axes = [np.arange(-n, n + 1) * step for n, step in zip(half, image.step_mm, strict=True)]
    patch = np.stack(np.meshgrid(*patch_axes, indexing="ij"), axis=-1).reshape(-1, 3)
    patch_shape = tuple(2 * int(n) + 1 for n in half)
    size = [fft.next_fast_len(a + b, real=True) for a, b in zip(image.shape, patch_shape, strict=True)]
    field = image.values.reshape(image.shape)
    border = np.concatenate([np.take(field, side, axis=axis).ravel() for axis in range(3) for side in (0, -1)])
    spectrum = fft.rfftn(field - np.median(border), s=size)
    turns = [np.zeros(3)] + [sign * np.radians(_TURN_DEG) * np.eye(3)[axis] for axis in range(3) for sign in (-1, 1)]
    lowest = image.points_mm[0]
    straight = Motion(-model.centre_mm, np.eye(3), (1, 1, 1), model.centre_mm)
    templates = [
        model.sample(
            patch, motion=straight.moved(np.zeros(3), turn), in_plane_mm=blurred_mm, axial_mm=blurred_mm, rough=True
        ).value.reshape(patch_shape)
        for turn in turns
    ]
    starts = []
    for flip in FLIPS:
        reversed_axes = [axis for axis in range(3) if flip[axis] < 0]
        # A mirror changes the sense of turns: F R(v) F is R(det(F) F v).
        signs = np.prod(flip) * np.asarray(flip)
        # The object's centre in the middle of the patch: the correlation then tells where that centre lies.
        centred = Motion(-np.asarray(flip) * model.centre_mm, np.eye(3), flip, model.centre_mm)
        best_score, best_motion = -np.inf, centred
        for turn, template in zip(turns, templates, strict=True):
            spectral = fft.rfftn(np.flip(template, tuple(reversed_axes)), s=size)
            product = fft.irfftn(spectrum * np.conj(spectral), s=size)
            where = np.array(np.unravel_index(int(np.argmax(product)), product.shape))
            score = float(product[tuple(where)])
            if score > best_score:
                signed = np.where(where > np.array(image.shape), where - np.array(size), where)
                centre = lowest + (signed + half) * image.step_mm
                best_score, best_motion = score, centred.moved(centre, signs * turn)
        starts.append(best_motion)
    return starts


def _coarse_fit(
    image: CoarseImage,
    values: NDArray[np.float64],
    points_mm: NDArray[np.float64],
    *,
    model: ReferenceModel,
    start: State,
    steps: int,
) -> Fit:
    return fit_state(
        values,
        points_mm=points_mm,
        model=model,
        start=start,
        narrowest_mm=0.8 * image.width_mm,
        steps=steps,
        tolerance_mm=0.02,
        rough=True,
    )
