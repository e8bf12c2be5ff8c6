"""In-plane width from one or more capillaries along the bed: a common width, fitted slice by slice over all of them."""

from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from evenblur.phantoms.base import Flag, Measurement, MeasurementError, Width
from evenblur.phantoms.common import check_volume, sampling_flags
from evenblur.phantoms.line_checks import (
    LineShape,
    check_halves,
    check_shape,
    describe_lines,
    shape_flags,
    shape_record,
)
from evenblur.phantoms.line_errors import LineErrors, errors_of, ratio_pull
from evenblur.phantoms.line_finding import Lines, find_lines
from evenblur.phantoms.line_fit import LineFit, fit_lines
from evenblur.phantoms.line_model import COMMON, PER_LINE, RATIO, SIGMA
from evenblur.phantoms.point_fit import WINDOW
from evenblur.widths import FWHM_PER_SIGMA

VERSION = "1"
FLATTEST = -0.3
"""Excess kurtosis below which an object is no thin line. A disc of variance v (a sixteenth of its diameter's square)
blurred by s² has −(v / (v + s²))²: at −0.3 its own size would make half of the width."""
STEEPEST_DEG = 15.0


def measure(
    volume: NDArray[np.float64], *, voxel_mm: tuple[float, float, float], details: Mapping[str, Any]
) -> Measurement:
    """Measure the in-plane resolution from an image of one or more thin lines along the bed, tilted up to 15 degrees.

    Parameters
    ----------
    volume
        Image, shape (x, y, z), z axial, any unit.
    voxel_mm
        Voxel sizes along x, y, z, mm.
    details
        `source_diameter_mm` (default 0): inner diameter of the capillaries; it is part of the model, so the width is
        the scanner's alone.

    Returns
    -------
    Measurement
        `axial` is None always: a line along the bed does not tell it. `fit["width_by_radius"]` lists each line's own
        width by its distance from the middle of the image, taken as the axis of the field.

    Raises
    ------
    MeasurementError
        If the image does not show thin bright lines along the bed.
    ValueError
        If the image is not 3-D, or a voxel size or the diameter is out of range.

    Notes
    -----
    Model: the section of an endless line of slope t is a Gaussian with the covariance sigma² I + sigma_z² t t'. The
    activity is free in every slice. The axial sigma_z is a nuisance: fitted along, with ln(sigma_z / sigma) held at
    0 ± 0.4 (the spread across scanners); what that leaves open is part of the standard error. Slices within two widths
    of a line's end are left out.

    Examples
    --------
    >>> x, z = np.arange(32) * 2.0, np.arange(40) * 3.0
    >>> across = [np.exp(-0.5 * ((x[:, None] - c) / 2.5) ** 2) for c in (30.3 + 0.02 * z, 31.2 - 0.01 * z)]
    >>> image = np.einsum("ik,jk->ijk", *across)
    >>> found = measure(image, voxel_mm=(2.0, 2.0, 3.0), details={})
    >>> round(found.in_plane.fwhm_mm, 2), found.axial
    (5.89, None)
    """
    diameter = float(details.get("source_diameter_mm") or 0.0)
    if not 0.0 <= diameter < 100.0:
        raise ValueError(f"source_diameter_mm must lie between 0 and 100, got {diameter}")
    image = check_volume(volume, voxel_mm)
    # The unit is none of the fit's business; its numbers should be near 1.
    unit = float(np.ptp(image))
    image = image / unit
    found = find_lines(image, voxel_mm=voxel_mm)
    fit = fit_lines(image, voxel_mm=voxel_mm, found=found, diameter_mm=diameter)
    share = _refuse_misfit(fit, found)
    occupied, strangers = _occupied(image, fit, found, voxel_mm)
    errors = errors_of(fit, image, voxel_mm=voxel_mm, occupied=occupied)
    shape = check_shape(fit, errors, voxel_mm=voxel_mm, diameter_mm=diameter)
    _refuse_flat_tops(shape)
    width = float(fit.parameters[SIGMA]) * FWHM_PER_SIGMA
    in_plane = Width(width, None if errors.se is None else errors.se * FWHM_PER_SIGMA, errors.df)
    flags = _block_flags(errors) + sampling_flags(in_plane, None, voxel_mm)
    flags += _object_flags(image, fit, found, diameter, share, strangers, voxel_mm)
    halves, halves_flags = check_halves(fit, errors)
    axis = (0.5 * (image.shape[0] - 1) * voxel_mm[0], 0.5 * (image.shape[1] - 1) * voxel_mm[1])
    lines = describe_lines(fit, shape, centre_mm=axis, step_mm=voxel_mm[2], unit=unit)
    return Measurement(
        in_plane,
        None,
        tuple(flags + shape_flags(shape) + halves_flags),
        {
            "lines": lines,
            "width_by_radius": sorted(
                ({key: line[key] for key in ("radius_mm", "in_plane_mm", "se_mm")} for line in lines),
                key=lambda row: row["radius_mm"],
            ),
            "source_diameter_mm": diameter,
            "axial_nuisance": {
                "ratio_to_in_plane": round(float(np.exp(fit.parameters[RATIO])), 3),
                "effect_on_width_mm": round(ratio_pull(fit) * FWHM_PER_SIGMA, 4),
            },
            **shape_record(shape),
            "residual_share": round(share, 6),
            "noise_correlation_mm": {
                "in_plane": round(fit.correlation_mm[0], 2),
                "axial": round(fit.correlation_mm[1], 2),
            },
            "se_from": errors.source,
            "blocks": {"lines": errors.blocks, "background": errors.patches},
            "halves": halves,
            "slices": int(fit.sample.slices.size),
            "voxels": int(fit.sample.values.size),
            "version": VERSION,
            "profile": _profile(fit),
        },
    )


def _refuse_misfit(fit: LineFit, found: Lines) -> float:
    """Root mean square residual as a share of the peak; refuse what blurred lines do not explain."""
    peaks = [
        float(np.median(fit.solved.amplitudes[fit.solved.amplitudes[:, k] != 0.0, k])) for k in range(len(found.lines))
    ]
    if min(peaks) <= 0.0:
        raise MeasurementError("a fitted line is not brighter than its surroundings")
    residuals = fit.fitted.residuals[:-1]
    left = float(residuals @ residuals)
    backgrounds = fit.parameters[COMMON:].reshape(-1, PER_LINE)[fit.sample.owner, 6]
    unexplained = left / max(float(np.sum((fit.sample.values - backgrounds) ** 2)), 1e-300)
    # The finder's noise is that of the smoothed image: of white noise about a quarter is left there.
    noise_only = (4.0 * found.noise) ** 2 * residuals.size
    if unexplained > 0.05 and left > noise_only:
        raise MeasurementError(
            f"the bright objects are not blurred lines ({100 * unexplained:.0f} % of their signal does not fit)"
        )
    return float(np.sqrt(left / residuals.size) / max(peaks))


def _refuse_flat_tops(shape: LineShape) -> None:
    if shape.kurtosis < FLATTEST and (
        not np.isfinite(shape.kurtosis_se) or shape.kurtosis < FLATTEST - 3.0 * shape.kurtosis_se
    ):
        raise MeasurementError(
            f"the bright objects have flat tops (excess kurtosis {shape.kurtosis:.1f}): they are wider than their "
            "blur, no thin lines"
        )


def _occupied(
    image: NDArray[np.float64], fit: LineFit, found: Lines, voxel_mm: tuple[float, float, float]
) -> tuple[NDArray[np.bool_], float]:
    """Where anything bright is; and the volume of bright things that are no line, as a share of the lines' own."""
    smooth = ndimage.gaussian_filter(image, (0.7, 0.7, 1.0), mode="nearest")
    bright = smooth > found.threshold
    reach = WINDOW * float(fit.parameters[SIGMA])
    size = [2 * max(1, int(np.ceil(0.6 * reach / step))) + 1 for step in voxel_mm]
    near_lines = np.zeros(image.shape, dtype=bool)
    x, y = np.arange(image.shape[0]) * voxel_mm[0], np.arange(image.shape[1]) * voxel_mm[1]
    for which, line in enumerate(fit.sample.lines):
        cx, cy, slope_x, slope_y = fit.line(which)[:4]
        for k in range(max(0, line.seen_first - size[2]), min(image.shape[2], line.seen_last + size[2] + 1)):
            z = k * voxel_mm[2] - fit.sample.middle_mm[which]
            distance = np.hypot((x - cx - slope_x * z)[:, None], y - cy - slope_y * z)
            near_lines[..., k] |= distance < 1.5 * reach
    own = int(np.count_nonzero(bright & near_lines))
    others = int(np.count_nonzero(bright & ~near_lines))
    return ndimage.maximum_filter(bright, size=size) | near_lines, others / max(own, 1)


def _block_flags(errors: LineErrors) -> list[Flag]:
    if errors.se is not None:
        return []
    return [
        Flag(
            "too_few_blocks",
            "Fewer than 12 independent parts (slabs of the lines longer than the noise's correlation, or empty parts "
            "of the image as large as a line) are there: the width has no standard error.",
            float(errors.patches),
        )
    ]


def _object_flags(
    image: NDArray[np.float64],
    fit: LineFit,
    found: Lines,
    diameter: float,
    share: float,
    strangers: float,
    voxel_mm: tuple[float, float, float],
) -> list[Flag]:
    flags = []
    width = float(fit.parameters[SIGMA]) * FWHM_PER_SIGMA
    cut = 0
    steepest = 0.0
    for which, line in enumerate(fit.sample.lines):
        x, y, slope_x, slope_y = fit.line(which)[:4]
        steepest = max(steepest, float(np.degrees(np.arctan(np.hypot(slope_x, slope_y)))))
        z = np.array([line.first, line.last]) * voxel_mm[2] - fit.sample.middle_mm[which]
        places = np.stack([x + slope_x * z, y + slope_y * z])
        last = (np.array(image.shape[:2]) - 1)[:, None] * np.array(voxel_mm[:2])[:, None]
        cut += int(np.any((places < 0.85 * width) | (places > last - 0.85 * width)))
    if cut:
        flags.append(
            Flag(
                "object_cut",
                f"{cut} of {fit.sample.count} lines come so near the edge of the image that a part of their blur is "
                "missing.",
                float(cut),
            )
        )
    if steepest > STEEPEST_DEG + 0.5:
        flags.append(
            Flag(
                "tilt_large",
                f"A line is tilted by {steepest:.0f} degrees against the bed; up to {STEEPEST_DEG:.0f} are tested.",
                round(steepest, 2),
            )
        )
    top = _cut_off_voxels(image)
    if top >= 4 + fit.sample.count:
        flags.append(
            Flag(
                "saturated",
                f"{top} voxels hold exactly the image's maximum: the values seem to be cut off there, which widens "
                "peaks.",
                float(top),
            )
        )
    if diameter > 1.5 * width:
        flags.append(
            Flag(
                "source_large",
                f"The capillaries ({diameter:.1f} mm) are much wider than the blur: the result leans on their exact "
                "shape.",
                round(diameter, 3),
            )
        )
    if strangers > 0.02:
        flags.append(
            Flag(
                "other_object",
                f"Something else is in the image ({100 * strangers:.0f} % of the lines' size); it was left out.",
                round(strangers, 4),
            )
        )
    pattern = _pattern(fit)
    if pattern > 0.02:
        flags.append(
            Flag(
                "residuals_structured",
                f"The lines depart from blurred lines by {100 * pattern:.1f} % of the peak, alike in all slices: the "
                "source or the blur is not what the model says.",
                round(pattern, 4),
            )
        )
    return flags


def _cut_off_voxels(image: NDArray[np.float64]) -> int:
    """How many voxels hold exactly the maximum; of one slice only where slices repeat each other, as without noise."""
    at_top = np.count_nonzero(image == image.max(), axis=(0, 1))
    highest = int(np.argmax(at_top))
    neighbour = highest + 1 if highest + 1 < image.shape[2] else highest - 1
    # To rounding: not every processor computes slices that should be alike to the last digit.
    repeated = np.allclose(image[..., highest], image[..., neighbour], rtol=0.0, atol=1e-9 * float(image.max()))
    return int(at_top.max() if repeated else at_top.sum())


def _pattern(fit: LineFit) -> float:
    """What the model misses alike along the lines: root mean square over places around the line.

    As a share of the peak. Places are rings half a sigma wide, in quadrants; what noise alone would leave is taken off.
    """
    sigma = float(fit.parameters[SIGMA])
    offset, peaks = fit.offsets(), fit.peaks()
    ring = np.floor(np.hypot(*offset) / (0.5 * sigma)).astype(int)
    place = fit.sample.owner * 64 + np.minimum(ring, 15) * 4 + (offset[0] > 0) + 2 * (offset[1] > 0)
    # The mean of residual / peak, in which slices count by what they know.
    weight, count = np.bincount(place, peaks**2), np.bincount(place)
    good = weight > 0.0
    mean = np.bincount(place, peaks * fit.fitted.residuals[:-1])[good] / weight[good]
    excess = float(np.average(mean**2 - fit.noise**2 / weight[good], weights=count[good]))
    return float(np.sqrt(max(excess, 0.0)))


def _profile(fit: LineFit) -> dict[str, Any]:
    """Mean over all lines and slices by distance from the line; 1 on the line."""
    sigma = float(fit.parameters[SIGMA])
    peaks = fit.peaks()
    backgrounds = fit.parameters[COMMON:].reshape(-1, PER_LINE)[fit.sample.owner, 6]
    values = fit.sample.values - backgrounds
    distance = np.hypot(*fit.offsets())
    bins = np.floor(distance / (sigma / 4.0)).astype(int)
    weight = np.bincount(bins, peaks**2)
    good = weight > 0.0

    def mean(v: NDArray[np.float64], digits: int) -> list[float]:
        return [round(float(m), digits) for m in np.bincount(bins, v * peaks**2)[good] / weight[good]][:200]

    share = values / np.where(peaks == 0.0, 1.0, peaks)
    missed = fit.fitted.residuals[:-1] / np.where(peaks == 0.0, 1.0, peaks)
    return {
        "label": "Mean of the lines by distance from the line",
        "unit": "share of the peak",
        "position_mm": mean(distance, 4),
        "measured": mean(share, 6),
        "fitted": mean(share - missed, 6),
    }
