"""Widths from a filled cylinder: in-plane from the blur of its wall, axial from the blur of its ends."""

from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from evenblur.phantoms.base import Flag, Measurement, MeasurementError, Width
from evenblur.phantoms.blocks import cylinder_blocks, cylinder_correlation
from evenblur.phantoms.common import check_volume, halves_of_width, sampling_flags
from evenblur.phantoms.cylinder_checks import check_edge, check_variation, edge_profile, misfit
from evenblur.phantoms.cylinder_fit import PRIOR_SPREAD, SIGMA, SIGMA_Z, CylinderFit, fit_cylinder
from evenblur.phantoms.cylinder_pictures import cylinder_slices
from evenblur.phantoms.cylinder_start import Start, find_cylinder
from evenblur.statistics import Jackknife, block_jackknife, two_halves
from evenblur.widths import FWHM_PER_SIGMA

VERSION = "1"
LARGEST_AXIAL_SE_MM = 0.5
"""A width known less well than this is no measurement: the axial direction then has none."""
LARGEST_MISFIT = 0.07
"""Root mean square departure at the wall, beyond the noise, that makes the object no cylinder (share of the activity).
A width that differs by 2 mm between two directions leaves 0.02; a ball leaves 0.11, a box 0.36."""
ROUNDNESS_MM = 0.02
"""How far a real cylinder and blur are round, as a width: without ends, the tilt's effect must stand out of this."""


def measure(
    volume: NDArray[np.float64], *, voxel_mm: tuple[float, float, float], details: Mapping[str, Any]
) -> Measurement:
    """Measure the resolution from an image of a uniformly filled cylinder, straight or tilted up to 20 degrees.

    Parameters
    ----------
    volume
        Image, shape (x, y, z), z axial, any unit.
    voxel_mm
        Voxel sizes along x, y, z, mm.
    details
        `radius_mm` and `length_mm` of the inside, both optional. They are fitted always; a given value that differs is
        flagged, so a wrong table entry cannot bend the width.

    Returns
    -------
    Measurement
        `in_plane` is the width of the wall's blur; `axial` comes from the ends seen in the field, or from a large tilt,
        and is None where neither tells it.

    Raises
    ------
    MeasurementError
        If the image does not show one cylinder hotter than its surroundings.
    ValueError
        If the image is not 3-D or the voxel sizes are not positive.

    Notes
    -----
    Model: a disc blurred by a Gaussian is the non-central chi-square distribution with two degrees of freedom; an end
    is an error function. Centre, radius, tilt, activity inside and out, cupping and slow gradients are fitted along.

    Examples
    --------
    >>> x = np.arange(48) * 2.0
    >>> from evenblur.phantoms.disc import disc_profile
    >>> flat = disc_profile(np.hypot(x[:, None] - 47.0, x - 48.0), radius_mm=30.0, sigma_mm=2.5)
    >>> image = np.repeat(flat[..., None], 24, axis=2)
    >>> found = measure(image, voxel_mm=(2.0, 2.0, 3.0), details={})
    >>> round(found.in_plane.fwhm_mm, 2), found.axial
    (5.89, None)
    """
    image = check_volume(volume, voxel_mm)
    start = find_cylinder(image, voxel_mm=voxel_mm)
    fit, axial_source = _fit(image, voxel_mm, start)
    width, width_z = fit.value("sigma") * FWHM_PER_SIGMA, fit.value("sigma_z") * FWHM_PER_SIGMA
    _refuse_nonsense(fit, width)
    shape = (image.shape[0], image.shape[1], image.shape[2])
    correlation = cylinder_correlation(fit, shape=shape, voxel_mm=voxel_mm)
    blocks = cylinder_blocks(fit, correlation_mm=correlation)
    labels = blocks.labels
    spread = _jackknife(fit, labels)
    wall = (blocks.wall, blocks.wall_excess)
    flags: list[Flag] = []

    in_plane = Width(width, *_error(spread, SIGMA, *wall))
    if in_plane.se_mm is not None and axial_source is None:
        in_plane = Width(width, float(np.hypot(in_plane.se_mm, _prior_pull(fit))), in_plane.df)
    axial: Width | None = None
    if axial_source is not None:
        told = (blocks.ends, blocks.end_excess) if axial_source == "ends" else wall
        axial = Width(width_z, *_error(spread, SIGMA_Z, *told))
        if axial_source == "tilt":
            axial, flag = _axial_from_tilt(axial, fit)
            flags.append(flag)
        elif axial.se_mm is not None and axial.se_mm > LARGEST_AXIAL_SE_MM:
            flags.append(
                Flag(
                    "axial_uncertain",
                    f"The axial width is known to {axial.se_mm:.1f} mm only, so none is given.",
                    round(axial.se_mm, 4),
                )
            )
            axial = None
    else:
        flags.append(
            Flag(
                "ends_not_seen",
                "No end of the cylinder lies well inside the field and its tilt is small: "
                "the image does not tell the axial width.",
            )
        )
    flags += _block_flags(in_plane, axial, blocks.wall, blocks.ends)
    profile = edge_profile(fit, labels)
    edge_flags, edge = check_edge(fit, profile)
    variation_flags, variation = check_variation(fit, labels, axial_known=axial is not None)
    halves, halves_flags = _halves(fit, labels, axial is not None)
    flags += edge_flags + [f for f in variation_flags if f.code not in {g.code for g in edge_flags}] + halves_flags
    flags += _object_flags(image, fit, start, details) + sampling_flags(in_plane, axial, voxel_mm)
    return Measurement(
        in_plane,
        axial,
        tuple(flags),
        {
            **_description(fit, start, correlation, blocks.wall, blocks.ends),
            **edge,
            **variation,
            "halves": halves,
            "axial_from": axial_source if axial is not None else None,
            "profile": {
                "label": "Mean across the wall: distance from the fitted radius",
                "unit": "share of the activity",
                "position_mm": [round(float(x), 4) for x in profile.position_mm],
                "measured": [round(float(x), 6) for x in profile.measured],
                "fitted": [round(float(x), 6) for x in profile.fitted],
            },
            "slices": cylinder_slices(image, voxel_mm=voxel_mm, fit=fit, start=start),
        },
    )


def _fit(
    image: NDArray[np.float64], voxel_mm: tuple[float, float, float], start: Start
) -> tuple[CylinderFit, str | None]:
    """The fit, and what tells the axial width: "ends", "tilt" or None."""
    if any(end is not None for end in start.ends_mm):
        fit = fit_cylinder(image, voxel_mm=voxel_mm, start=start, use_prior=False, needs_end=True)
        if fit is not None:
            return fit, "ends"
    held = fit_cylinder(image, voxel_mm=voxel_mm, start=start, use_prior=True)
    assert held is not None
    sine2 = 1.0 - float(held.placed.axis[2]) ** 2
    if ROUNDNESS_MM / max(sine2, 1e-12) < LARGEST_AXIAL_SE_MM and not any(held.sample.ends):
        free = fit_cylinder(image, voxel_mm=voxel_mm, start=start, use_prior=False)
        if free is not None and free.fitted.converged and free.value("sigma_z") < 0.5 * free.value("radius"):
            correlation = cylinder_correlation(free, shape=image.shape, voxel_mm=voxel_mm)
            blocks = cylinder_blocks(free, correlation_mm=correlation)
            se, _ = _error(_jackknife(free, blocks.labels), SIGMA_Z, blocks.wall, blocks.wall_excess)
            if se is not None and np.hypot(se, _roundness(free)) <= LARGEST_AXIAL_SE_MM:
                return free, "tilt"
    return held, None


def _refuse_nonsense(fit: CylinderFit, width: float) -> None:
    contrast = fit.value("inside") - fit.value("outside")
    if contrast <= 0.0:
        raise MeasurementError("the fitted cylinder is not hotter than its surroundings")
    if fit.value("radius") < width:
        raise MeasurementError(
            f"the object ({2 * fit.value('radius'):.1f} mm across) is no wider than its blur: this is not a cylinder "
            "from which a width can be had"
        )
    share = misfit(fit)
    if share > LARGEST_MISFIT:
        raise MeasurementError(
            f"the object is not a round cylinder: around its edge the image departs from one by {100 * share:.0f} % of "
            "the activity"
        )
    low, high = float(fit.sample.values.min()), float(fit.sample.values.max())
    if not fit.fitted.converged or not 0.3 < contrast / max(high - low, 1e-300) < 3.0:
        raise MeasurementError("no blurred cylinder could be fitted to the image")


def _jackknife(fit: CylinderFit, labels: NDArray[np.int64]) -> Jackknife:
    extra = fit.fitted.residuals.size - labels.size
    used = np.any(fit.fitted.jacobian != 0.0, axis=0)
    result = block_jackknife(
        fit.fitted.residuals,
        jacobian=fit.fitted.jacobian[:, used],
        blocks=np.append(labels, np.full(extra, -1, dtype=np.int64)),
    )
    if result.se is None or result.df is None:
        return result
    se, df = np.full(used.size, np.nan), np.full(used.size, np.nan)
    se[used], df[used] = result.se, result.df
    return Jackknife(se, df, result.blocks, result.leave_one_out)


def _error(spread: Jackknife, parameter: int, blocks: int, excess: float) -> tuple[float | None, float | None]:
    if spread.se is None or spread.df is None or blocks < 12 or not np.isfinite(spread.se[parameter]):
        return None, None
    return float(excess * spread.se[parameter] * FWHM_PER_SIGMA), float(max(spread.df[parameter], 1.0))


def _prior_pull(fit: CylinderFit) -> float:
    """How far (mm FWHM) the in-plane width moves if the unseen axial width is off by its spread across scanners."""
    row = fit.fitted.jacobian[-1]
    weight = -row[SIGMA] * fit.value("sigma")
    used = np.any(fit.fitted.jacobian != 0.0, axis=0)
    normal = (fit.fitted.jacobian.T @ fit.fitted.jacobian)[np.ix_(used, used)]
    scale = np.sqrt(np.diag(normal))
    move = np.linalg.solve(normal / np.outer(scale, scale), row[used] / scale * weight * PRIOR_SPREAD) / scale
    full = np.zeros(used.size)
    full[used] = move
    return float(abs(full[SIGMA]) * FWHM_PER_SIGMA)


def _roundness(fit: CylinderFit) -> float:
    sine2 = 1.0 - float(fit.placed.axis[2]) ** 2
    return ROUNDNESS_MM / sine2 * fit.value("sigma") / fit.value("sigma_z")


def _axial_from_tilt(axial: Width, fit: CylinderFit) -> tuple[Width, Flag]:
    total = None if axial.se_mm is None else float(np.hypot(axial.se_mm, _roundness(fit)))
    flag = Flag(
        "axial_from_tilt",
        "No end of the cylinder lies well inside the field: the axial width comes from the "
        "cylinder's tilt alone, and holds only if object and blur are round.",
        total and round(total, 4),
    )
    return Width(axial.fwhm_mm, total, axial.df), flag


def _block_flags(in_plane: Width, axial: Width | None, wall_blocks: int, end_blocks: int) -> list[Flag]:
    flags = []
    if in_plane.se_mm is None:
        flags.append(
            Flag(
                "too_few_blocks",
                "The wall has fewer than 12 parts wider than the noise's correlation: the "
                "in-plane width has no standard error.",
                float(wall_blocks),
            )
        )
    if axial is not None and axial.se_mm is None:
        flags.append(
            Flag(
                "too_few_blocks",
                "The ends have fewer than 12 parts wider than the noise's correlation: the "
                "axial width has no standard error.",
                float(end_blocks),
            )
        )
    return flags


def _halves(fit: CylinderFit, labels: NDArray[np.int64], axial: bool) -> tuple[dict[str, Any] | None, list[Flag]]:
    used = np.any(fit.fitted.jacobian != 0.0, axis=0)
    n = labels.size
    # The prior row, if any, goes into both halves through the common fit only.
    halves = two_halves(fit.fitted.residuals[:n], jacobian=fit.fitted.jacobian[:n, used], blocks=labels)
    if halves is None and not axial:
        used[SIGMA_Z] = False
        halves = two_halves(fit.fitted.residuals[:n], jacobian=fit.fitted.jacobian[:n, used], blocks=labels)
    if halves is None:
        return None, []
    where = {int(parameter): place for place, parameter in enumerate(np.flatnonzero(used))}
    record: dict[str, Any] = {}
    flags: list[Flag] = []
    for name, parameter, words in (("in_plane", SIGMA, "in-plane"), ("axial", SIGMA_Z, "axial")):
        if parameter not in where or (name == "axial" and not axial):
            record[name] = None
            continue
        sigma = float(fit.fitted.parameters[parameter])
        record[name], found = halves_of_width(
            halves, at=where[parameter], sigma_mm=sigma, words=words, least_mm=0.2, errors=4.0
        )
        flags += found
    return record, flags


def _object_flags(image: NDArray[np.float64], fit: CylinderFit, start: Start, details: Mapping[str, Any]) -> list[Flag]:
    flags = []
    radius, length = fit.value("radius"), _length(fit)
    given = details.get("radius_mm")
    if given is not None and abs(radius - float(given)) > max(1.0, 0.02 * radius):
        flags.append(
            Flag(
                "radius_differs",
                f"The fitted radius is {radius:.1f} mm, the table says {float(given):.1f} mm: "
                "is this the right phantom, and are the voxel sizes right?",
                round(radius - float(given), 3),
            )
        )
    given = details.get("length_mm")
    if given is not None and length is not None and abs(length - float(given)) > max(2.0, 0.03 * length):
        flags.append(
            Flag(
                "length_differs",
                f"The fitted length is {length:.1f} mm, the table says {float(given):.1f} "
                "mm: is this the right phantom, and are the slices right?",
                round(length - float(given), 3),
            )
        )
    if start.cut:
        flags.append(
            Flag(
                "object_cut", "The cylinder reaches the lateral edge of the image: only a part of its wall is measured."
            )
        )
    if start.other_share > 0.0:
        flags.append(
            Flag(
                "other_object",
                f"Something else is in the image ({100 * start.other_share:.1f} % of the "
                "cylinder's size); its surroundings were left out.",
                round(start.other_share, 4),
            )
        )
    tilt = float(np.degrees(np.arccos(min(1.0, fit.placed.axis[2]))))
    if tilt > 20.5:
        flags.append(
            Flag("tilt_large", f"The cylinder is tilted by {tilt:.0f} degrees; up to 20 are tested.", round(tilt, 2))
        )
    contrast = fit.value("inside") - fit.value("outside")
    noise = float(np.std(fit.fitted.residuals[: fit.sample.values.size])) / contrast
    top = int(np.count_nonzero(image == image.max()))
    bright = int(np.count_nonzero(image > fit.value("outside") + 0.9 * contrast))
    if noise > 1e-3 and top > max(20, 0.01 * bright):
        flags.append(
            Flag(
                "saturated",
                f"{top} voxels hold exactly the image's maximum: the values seem to be cut off "
                "there, which sharpens edges.",
                float(top),
            )
        )
    return flags


def _length(fit: CylinderFit) -> float | None:
    first, second = fit.end(0, "position"), fit.end(1, "position")
    return None if first is None or second is None else second - first


def _description(
    fit: CylinderFit, start: Start, correlation: tuple[float, float], wall_blocks: int, end_blocks: int
) -> dict[str, Any]:
    inside, outside = fit.value("inside"), fit.value("outside")
    length = _length(fit)
    noise = float(np.std(fit.fitted.residuals[: fit.sample.values.size]))
    return {
        "radius_mm": round(fit.value("radius"), 4),
        "length_mm": None if length is None else round(length, 4),
        "centre_mm": [round(fit.value("centre_x"), 3), round(fit.value("centre_y"), 3), round(start.middle_mm, 3)],
        "tilt_deg": round(float(np.degrees(np.arccos(min(1.0, fit.placed.axis[2])))), 3),
        "tilt_direction_deg": round(float(np.degrees(np.arctan2(fit.placed.axis[1], fit.placed.axis[0]))), 1),
        "inside": float(f"{inside:.6g}"),
        "outside": float(f"{outside:.6g}"),
        "cupping": round(fit.value("cupping"), 5),
        "residual_share": round(noise / (inside - outside), 5),
        "ends_seen": int(sum(fit.sample.ends)),
        "noise_correlation_mm": {"in_plane": round(correlation[0], 2), "axial": round(correlation[1], 2)},
        "blocks": {"wall": wall_blocks, "ends": end_blocks},
        "voxels": int(fit.sample.values.size),
        "version": VERSION,
    }
