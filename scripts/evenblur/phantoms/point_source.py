"""Widths from one or more small sources: a common in-plane and axial width, fitted over all of them."""

from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from evenblur.phantoms.base import Flag, Measurement, MeasurementError, Width
from evenblur.phantoms.common import check_volume, halves_of_width, sampling_flags
from evenblur.phantoms.cylinder_checks import tenth_to_half
from evenblur.phantoms.nema import response_widths
from evenblur.phantoms.point_errors import PointErrors, errors_of, shared_problem, source_blocks, without_own_parameters
from evenblur.phantoms.point_fit import COMMON, PER_SOURCE, PointFit, Sources, find_sources, fit_sources
from evenblur.statistics import MINIMUM_BLOCKS, block_jackknife, two_halves
from evenblur.widths import FWHM_PER_SIGMA

VERSION = "1"


def measure(
    volume: NDArray[np.float64], *, voxel_mm: tuple[float, float, float], details: Mapping[str, Any]
) -> Measurement:
    """Measure the resolution from an image of one or more small sources.

    Parameters
    ----------
    volume
        Image, shape (x, y, z), z axial, any unit.
    voxel_mm
        Voxel sizes along x, y, z, mm.
    details
        `source_diameter_mm` (default 0): diameter of the sources, taken as small spheres; it is part of the model, so
        the widths are the scanner's alone.

    Returns
    -------
    Measurement
        In-plane and axial width. `fit["nema"]` lists each source's widths by the recipe of NEMA NU 2, for comparison.

    Raises
    ------
    MeasurementError
        If the image does not show small sources brighter than their surroundings.
    ValueError
        If the image is not 3-D, or a voxel size or the diameter is out of range.

    Examples
    --------
    >>> x, z = np.arange(30) * 2.0, np.arange(20) * 2.0
    >>> across = np.exp(-0.5 * ((x - 29.3) / 2.5) ** 2)
    >>> image = np.einsum("i,j,k->ijk", across, across, np.exp(-0.5 * ((z - 20.4) / 3.0) ** 2))
    >>> found = measure(image, voxel_mm=(2.0, 2.0, 2.0), details={})
    >>> round(found.in_plane.fwhm_mm, 3), round(found.axial.fwhm_mm, 3)
    (5.887, 7.064)
    """
    diameter = float(details.get("source_diameter_mm") or 0.0)
    if not 0.0 <= diameter < 100.0:
        raise ValueError(f"source_diameter_mm must lie between 0 and 100, got {diameter}")
    image = check_volume(volume, voxel_mm)
    sources = find_sources(image, voxel_mm=voxel_mm)
    fit = fit_sources(image, voxel_mm=voxel_mm, sources=sources, diameter_mm=diameter)
    share = _refuse_nonsense(fit, sources)
    labels = source_blocks(fit)
    errors = errors_of(fit, image, voxel_mm=voxel_mm, labels=labels)
    widths = [_width(fit, errors, k) for k in range(COMMON)]
    flags: list[Flag] = []
    if errors.se is None:
        flags.append(
            Flag(
                "too_few_blocks",
                "Fewer than 12 independent parts (sources, or empty parts of the image as "
                "large as a source) are there: the widths have no standard error.",
                float(errors.patches),
            )
        )
    flags += sampling_flags(widths[0], widths[1], voxel_mm)
    flags += _object_flags(image, fit, sources, diameter, share, voxel_mm)
    shape_flags, shape = _check_shape(fit, labels, errors)
    halves, halves_flags = _halves(fit, labels)
    return Measurement(
        widths[0],
        widths[1],
        tuple(flags + shape_flags + halves_flags),
        {
            "sources": [
                {
                    "centre_mm": [round(float(c), 3) for c in fit.source(k)[:3]],
                    "peak": float(f"{fit.source(k)[3]:.6g}"),
                    "background": float(f"{fit.source(k)[4]:.6g}"),
                }
                for k in range(fit.count)
            ],
            "source_diameter_mm": diameter,
            "residual_share": round(share, 6),
            "se_from": errors.source,
            "blocks": {"sources": errors.blocks, "background": errors.patches},
            **shape,
            "halves": halves,
            "nema": [_nema(image, fit, k, voxel_mm) for k in range(fit.count)],
            "voxels": int(fit.values.size),
            "version": VERSION,
            "profile": _profile(fit),
        },
    )


def _width(fit: PointFit, errors: PointErrors, which: int) -> Width:
    fwhm = float(fit.fitted.parameters[which]) * FWHM_PER_SIGMA
    if errors.se is None or errors.df is None:
        return Width(fwhm, None, None)
    return Width(fwhm, float(errors.se[which]) * FWHM_PER_SIGMA, float(errors.df[which]))


def _refuse_nonsense(fit: PointFit, sources: Sources) -> float:
    """Root mean square residual as a share of the peak; refuse what a blurred point does not explain."""
    peaks = np.array([fit.source(k)[3] for k in range(fit.count)])
    if np.any(peaks <= 0.0):
        raise MeasurementError("a fitted source is not brighter than its surroundings")
    backgrounds = np.array([fit.source(k)[4] for k in range(fit.count)])[fit.owner]
    left = float(np.sum(fit.fitted.residuals**2))
    unexplained = left / max(float(np.sum((fit.values - backgrounds) ** 2)), 1e-300)
    noise_only = sources.noise**2 * fit.values.size
    if unexplained > 0.05 and left > 4.0 * noise_only:
        raise MeasurementError(
            f"the bright spots are not blurred points ({100 * unexplained:.0f} % of their signal does not fit)"
        )
    return float(np.sqrt(left / fit.values.size) / peaks.max())


def _object_flags(
    image: NDArray[np.float64],
    fit: PointFit,
    sources: Sources,
    diameter: float,
    share: float,
    voxel_mm: tuple[float, float, float],
) -> list[Flag]:
    flags = []
    fwhm = fit.fitted.parameters[:COMMON] * FWHM_PER_SIGMA
    margin = 0.85 * np.array([fwhm[0], fwhm[0], fwhm[1]])
    last = (np.array(image.shape) - 1) * np.array(voxel_mm)
    cut = [k for k in range(fit.count) if np.any((fit.source(k)[:3] < margin) | (fit.source(k)[:3] > last - margin))]
    if cut:
        flags.append(
            Flag(
                "object_cut",
                f"{len(cut)} of {fit.count} sources lie so near the edge of the image that a part "
                "of their blur is missing.",
                float(len(cut)),
            )
        )
    top = int(np.count_nonzero(image == image.max()))
    if top >= 4 + fit.count:
        flags.append(
            Flag(
                "saturated",
                f"{top} voxels hold exactly the image's maximum: the values seem to be cut off "
                "there, which widens peaks.",
                float(top),
            )
        )
    if diameter > 1.5 * float(fwhm.min()):
        flags.append(
            Flag(
                "source_large",
                f"The sources ({diameter:.1f} mm) are much wider than the blur: the result leans on their exact shape.",
                round(diameter, 3),
            )
        )
    peak = max(float(fit.source(k)[3]) for k in range(fit.count))
    if share > 0.02 and share > 2.0 * sources.noise / peak:
        flags.append(
            Flag(
                "residuals_structured",
                f"The sources depart from blurred points by {100 * share:.1f} % of the "
                "peak: the source or the blur is not what the model says.",
                round(share, 4),
            )
        )
    return flags


def _check_shape(fit: PointFit, labels: NDArray[np.int64], errors: PointErrors) -> tuple[list[Flag], dict[str, Any]]:
    """One Gauss-Newton step for parameters that the fit did not have: x against y, tails, each source's own width."""
    scale = np.array([fit.fitted.parameters[0]] * 2 + [fit.fitted.parameters[1]])
    t = fit.offsets() / scale[:, None]
    shape_of = fit.fitted.jacobian
    peaks = np.array([fit.source(k)[3] for k in range(fit.count)])[fit.owner]
    gauss = peaks * np.exp(-0.5 * np.sum(t**2, axis=0))
    difference = gauss * (t[0] ** 2 - t[1] ** 2) / scale[0]
    tails = gauss * np.sum(t**4 - 6.0 * t**2 + 3.0, axis=0) / 24.0
    columns, names = [difference, tails], ["difference", "tails"]
    if fit.count > 1:
        for k in range(1, fit.count):
            columns.append(
                np.where(fit.owner == k, shape_of[:, 0], 0.0) - np.where(fit.owner == 0, shape_of[:, 0], 0.0)
            )
            names.append(f"source {k}")
    design = np.column_stack([shape_of, *columns])
    size = np.sqrt(np.sum(design**2, axis=0))
    scaled = design / size
    moves = np.linalg.lstsq(scaled.T @ scaled, scaled.T @ fit.fitted.residuals, rcond=1e-10)[0] / size
    extra = moves[COMMON + PER_SOURCE * fit.count :]
    se = _extra_errors(fit, design, moves, labels)
    # Blocks inside a source are correlated: their error is at least as far off as that of the width itself.
    residuals, jacobian = shared_problem(fit)
    plain = block_jackknife(residuals, jacobian=jacobian, blocks=labels)
    inflate = 1.0
    if errors.se is not None and plain.se is not None:
        inflate = max(1.0, float(np.max(errors.se / np.maximum(plain.se[:COMMON], 1e-12 * scale[0]))))
    se = se * inflate
    own_se = float(np.max(se[2:], initial=0.0)) * FWHM_PER_SIGMA
    flags: list[Flag] = []
    oval, oval_se = 2.0 * float(extra[0]) * FWHM_PER_SIGMA, 2.0 * float(se[0]) * FWHM_PER_SIGMA
    if abs(oval) > 0.4 and abs(oval) > 3.5 * oval_se:
        flags.append(
            Flag(
                "in_plane_not_round",
                f"The widths along x and y differ by {abs(oval):.1f} mm; the in-plane width is their mean.",
                round(oval, 4),
            )
        )
    kurtosis = float(extra[1])
    if abs(kurtosis) > 0.4 and abs(kurtosis) > 3.5 * float(se[1]):
        words = "longer tails" if kurtosis > 0 else "shorter tails"
        flags.append(
            Flag(
                "tail_heavy" if kurtosis > 0 else "not_gaussian",
                f"The blur has {words} than a Gaussian (excess kurtosis {kurtosis:.1f}): one width does not "
                "say it all.",
                round(kurtosis, 4),
            )
        )
    ratio = tenth_to_half(kurtosis) if abs(kurtosis) < 8.0 else None
    found: dict[str, Any] = {
        "x_minus_y_mm": round(oval, 4),
        "excess_kurtosis": round(kurtosis, 4),
        "tenth_to_half": None if ratio is None else round(ratio, 4),
    }
    if fit.count > 1:
        own = np.append(-np.sum(extra[2:]), extra[2:]) * FWHM_PER_SIGMA
        found["source_in_plane_offset_mm"] = [round(float(v), 4) for v in own]
        span = float(np.ptp(own))
        if errors.per_source_se is not None:
            # Each source alone: its share of the common error, times the number of sources that shared the load.
            own_se = float(np.max(errors.per_source_se[:, 0])) * fit.count * FWHM_PER_SIGMA
        if span > 0.4 and span > 4.0 * np.sqrt(2.0) * own_se:
            flags.append(
                Flag(
                    "width_varies",
                    f"The sources' in-plane widths differ by {span:.1f} mm; one width is given for all.",
                    round(span, 4),
                )
            )
    return flags, found


def _extra_errors(
    fit: PointFit, design: NDArray[np.float64], moves: NDArray[np.float64], labels: NDArray[np.int64]
) -> NDArray[np.float64]:
    """Standard errors of the parameters beyond the fit's own; infinite where the blocks cannot tell."""
    first = COMMON + PER_SOURCE * fit.count
    found = np.full(moves.size - first, np.inf)
    residuals = fit.fitted.residuals - design @ moves
    if fit.count < MINIMUM_BLOCKS:
        spread = block_jackknife(residuals, jacobian=design, blocks=labels)
        return found if spread.se is None else spread.se[first:]
    # Whole sources are the blocks: without its source, a source's own width is no question any more.
    shared = np.column_stack([design[:, :COMMON], design[:, first : first + 2]])
    left, columns = without_own_parameters(fit, shared)
    spread = block_jackknife(left, jacobian=columns, blocks=labels)
    if spread.se is not None:
        found[:2] = spread.se[COMMON:]
    return found


def _halves(fit: PointFit, labels: NDArray[np.int64]) -> tuple[dict[str, Any] | None, list[Flag]]:
    residuals, jacobian = shared_problem(fit)
    halves = two_halves(residuals, jacobian=jacobian, blocks=labels)
    if halves is None:
        return None, []
    record: dict[str, Any] = {}
    flags: list[Flag] = []
    for k, (name, words) in enumerate((("in_plane", "in-plane"), ("axial", "axial"))):
        sigma = float(fit.fitted.parameters[k])
        record[name], found = halves_of_width(halves, at=k, sigma_mm=sigma, words=words, least_mm=0.5, errors=5.0)
        flags += found
    return record, flags


def _nema(
    image: NDArray[np.float64], fit: PointFit, which: int, voxel_mm: tuple[float, float, float]
) -> dict[str, float | None]:
    """Half and tenth widths along x, y, z: the response summed over two widths either side in the other directions."""
    x, y, z, _, background = fit.source(which)
    fwhm = fit.fitted.parameters[[0, 0, 1]] * FWHM_PER_SIGMA
    centre = np.array([x, y, z]) / np.array(voxel_mm)
    found: dict[str, float | None] = {}
    for axis, name in enumerate("xyz"):
        box = []
        for k in range(3):
            reach = (3.0 if k == axis else 1.0) * fwhm[k] / voxel_mm[k]
            low, high = round(centre[k] - reach), round(centre[k] + reach)
            box.append(slice(max(0, low), min(image.shape[k], high + 1)))
        response = (image[tuple(box)] - background).sum(axis=tuple({0, 1, 2} - {axis}))
        widths = response_widths(response, step_mm=voxel_mm[axis]) if response.size >= 3 else None
        half = None if widths is None else widths.half_mm
        tenth = None if widths is None else widths.tenth_mm
        found[f"{name}_half_mm"] = None if half is None else round(half, 4)
        found[f"{name}_tenth_mm"] = None if tenth is None else round(tenth, 4)
    return found


def _profile(fit: PointFit) -> dict[str, Any]:
    """Mean over all sources by in-plane distance from the centre, in the slices near it; 1 at the centre."""
    sigma, sigma_z = fit.fitted.parameters[:COMMON]
    offset = fit.offsets()
    peaks = np.array([fit.source(k)[3] for k in range(fit.count)])[fit.owner]
    backgrounds = np.array([fit.source(k)[4] for k in range(fit.count)])[fit.owner]
    along = np.exp(-0.5 * (offset[2] / sigma_z) ** 2)
    chosen = np.abs(offset[2]) < max(
        1.2 * sigma_z, 0.51 * float(np.ptp(np.unique(offset[2])[:2]) if offset.size else 1)
    )
    distance = np.hypot(offset[0], offset[1])[chosen]
    values = ((fit.values - backgrounds) / peaks / along)[chosen]
    fitted = values - (fit.fitted.residuals / peaks / along)[chosen]
    bins = np.floor(distance / (sigma / 4.0)).astype(int)
    count = np.bincount(bins, minlength=1)
    good = count > 0

    def mean(v: NDArray[np.float64], digits: int) -> list[float]:
        return [round(float(m), digits) for m in (np.bincount(bins, v, minlength=1)[good] / count[good])]

    return {
        "label": "Mean of the sources by in-plane distance from the centre",
        "unit": "share of the peak",
        "position_mm": mean(distance, 4),
        "measured": mean(values, 6),
        "fitted": mean(fitted, 6),
    }
