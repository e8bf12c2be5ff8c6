"""What an image's values say: their range, shares that are missing or negative, signs of a cut, the voxels' hash."""

import hashlib
from dataclasses import dataclass
from typing import Any

import numpy as np

from evenblur.images.findings import Finding
from evenblur.images.nibabel_alone import nib
from evenblur.images.reading import Image
from evenblur.images.streaming import iter_frames_float32

NEGATIVE_DEPTH = 0.1
"""A minimum further below zero than this share of the maximum is flagged."""

CUT_VOXELS = 3
"""So many voxels at the number type's largest value are no accident: writers that fill the range leave one."""

CUT_SHARE_HELD, CUT_SHARE_FLAGGED = 1e-4, 1e-3
"""Numbers stored as they are were cut off if this share stands at the limit and others reach up to it. Where a scale
factor spreads the values over the whole range, or where nothing lies between (a mask), the object's own plateau may
stand there, so that a larger share is only flagged."""

NEAR_LIMIT = 0.75
"""From this share of the limit on values count as reaching up to it."""

AXIAL_END_SHARE, SIDE_SHARE = 0.5, 0.25
"""The object goes on beyond the field where the outermost slice or side plane holds this share of the fullest one."""


@dataclass(frozen=True)
class Values:
    """What was seen of an image's values, over all frames.

    Attributes
    ----------
    voxels_sha256
        Hash of the voxels as little-endian float32, first axis fastest.
    minimum, maximum
        Of the finite values; None where there is none.
    missing, negative, voxels
        Numbers of voxels.
    total
        Sum of the finite values.
    empty_frames, frames
        Frames without a value other than zero, and all frames.
    at_limit
        Voxels at the number type's largest value; None where the type has no limit to speak of.
    near_limit
        Voxels below that value and not below three quarters of it, where no scale factor stands between.
    scaled
        Whether a scale factor stands between stored and true values.
    profiles
        Sum over all frames of each plane across each array axis.
    """

    voxels_sha256: str
    minimum: float | None
    maximum: float | None
    missing: int
    negative: int
    voxels: int
    total: float
    empty_frames: int
    frames: int
    at_limit: int | None
    near_limit: int
    scaled: bool
    profiles: tuple[np.ndarray, ...]


def look_at_values(image: Image) -> Values:
    """Read an image frame by frame and to the end, as the smoothing reads it.

    Parameters
    ----------
    image
        An opened image.

    Raises
    ------
    InputError
        If the data are damaged, cut short or not finite (see `iter_frames_float32`).
    """
    digest = hashlib.sha256()
    limit, scaled = _limit(image)
    low, high, total = np.inf, -np.inf, 0.0
    missing = negative = voxels = empty = at_limit = near_limit = 0
    profiles = tuple(np.zeros(length) for length in image.grid.shape)
    for frame in iter_frames_float32(image):
        digest.update(frame.astype("<f4", copy=False).tobytes(order="F"))
        valid = np.isfinite(frame)
        gaps = frame.size - int(np.count_nonzero(valid))
        finite = frame if not gaps else np.where(valid, frame, np.float32(0))
        missing, voxels = missing + gaps, voxels + frame.size
        negative += int(np.count_nonzero(finite < 0))
        if gaps < frame.size:
            low = min(low, float(frame.min(initial=np.inf, where=valid)))
            high = max(high, float(frame.max(initial=-np.inf, where=valid)))
        empty += not finite.any()
        if limit is not None:
            at_limit += int(np.count_nonzero(frame == limit))
            if not scaled:
                near_limit += int(np.count_nonzero((frame >= NEAR_LIMIT * limit) & (frame < limit)))
        for axis in range(3):
            others = tuple(other for other in range(3) if other != axis)
            profiles[axis][:] += finite.sum(axis=others, dtype=np.float64)
        total += float(finite.sum(dtype=np.float64))
    return Values(
        voxels_sha256=digest.hexdigest(),
        minimum=low if np.isfinite(low) else None,
        maximum=high if np.isfinite(high) else None,
        missing=missing,
        negative=negative,
        voxels=voxels,
        total=total,
        empty_frames=empty,
        frames=image.frames,
        at_limit=None if limit is None else at_limit,
        near_limit=near_limit,
        scaled=scaled,
        profiles=profiles,
    )


def _limit(image: Image) -> tuple["np.float32 | None", bool]:
    """The value that the largest storable whole number stands for, rounded as the reading rounds; None for others."""
    proxy: Any = getattr(image.source, "dataobj", None)
    if not isinstance(image.source, nib.analyze.AnalyzeImage) or not hasattr(proxy, "slope"):
        return None, False
    stored: Any = np.dtype(proxy.dtype)
    if stored.kind not in "iu":
        return None, False
    slope, inter = float(proxy.slope), float(proxy.inter)
    with np.errstate(over="ignore"):
        return np.float32(float(np.iinfo(stored).max) * slope + inter), (slope, inter) != (1.0, 0.0)


def value_findings(values: Values, *, axial_axis: int, scan: bool) -> list[Finding]:
    """What a person should know of an image's values.

    Parameters
    ----------
    values
        As `look_at_values` gives them.
    axial_axis
        The array axis along the bed.
    scan
        Whether it is a scan: phantoms may well reach through the whole axial field.
    """
    if values.minimum is None or values.maximum is None:
        return [Finding("image_not_finite", "holds no value at all; export it again", holds=True)]
    if values.minimum == values.maximum == 0:
        return [Finding("image_zero", "every voxel has the value zero; export it again", holds=True)]
    found = [
        *_shares(values),
        *_cut_off(values),
        *([_constant(values.minimum)] if values.minimum == values.maximum else []),
        *([_empty(values)] if values.empty_frames else []),
    ]
    if values.minimum != values.maximum:
        found += _short_field(values, axial_axis=axial_axis, scan=scan)
    return found


def _shares(values: Values) -> list[Finding]:
    found = []
    if values.missing:
        share = round(values.missing / values.voxels, 6)
        found.append(Finding("nan_voxels", f"{_percent(share)} of the voxels have no value", value=share))
    low, high = values.minimum, values.maximum
    # Noise around an empty background is negative half of the time; values this far below zero are not noise.
    if low is not None and high is not None and low < -NEGATIVE_DEPTH * max(high, 0.0):
        share = values.negative / values.voxels
        text = f"{_percent(share)} of the voxels are negative, down to {low:.3g}"
        found.append(Finding("negative_voxels", text, value=low))
    return found


def _cut_off(values: Values) -> list[Finding]:
    if values.at_limit is None or values.at_limit < CUT_VOXELS:
        return []
    share = values.at_limit / values.voxels
    text = f"{_percent(share)} of the voxels have the largest value that their number type can hold"
    plain = not values.scaled and values.near_limit > 0
    if plain and share >= CUT_SHARE_HELD:
        return [Finding("image_not_finite", f"{text}: cut off; export it with its full range", holds=True)]
    if plain or share >= CUT_SHARE_FLAGGED:
        return [Finding("saturated", text, value=round(share, 6))]
    return []


def _constant(value: float) -> Finding:
    return Finding("constant_image", f"every voxel has the value {value:.6g}", value=value)


def _empty(values: Values) -> Finding:
    text = f"{values.empty_frames} of {values.frames} frames hold no value but zero"
    return Finding("empty_frames", text, value=float(values.empty_frames))


def _short_field(values: Values, *, axial_axis: int, scan: bool) -> list[Finding]:
    shares = {}
    for axis, profile in enumerate(values.profiles):
        fullest = float(profile.max())
        if len(profile) > 2 and fullest > 0:
            shares[axis] = max(float(profile[0]), float(profile[-1])) / fullest
    side = max((share for axis, share in shares.items() if axis != axial_axis), default=0.0)
    end = shares.get(axial_axis, 0.0) if scan else 0.0
    found = []
    if end >= AXIAL_END_SHARE:
        text = f"a slice at an axial end holds {_percent(end)} of the activity of the fullest slice"
        found.append(Finding("field_short", text, value=round(end, 4)))
    if side >= SIDE_SHARE:
        text = f"a plane at a side of the field holds {_percent(side)} of the activity of the fullest plane"
        found.append(Finding("field_short", text, value=round(side, 4)))
    return found


def _percent(share: float) -> str:
    """A share in percent, never rounded to nothing.

    >>> _percent(0.5), _percent(0.00012)
    ('50.0 %', '0.012 %')
    """
    percent = 100 * share
    return f"{percent:.1f} %" if percent >= 0.1 else f"{percent:.2g} %"
