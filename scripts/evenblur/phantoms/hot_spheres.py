"""Resolution from fillable hot spheres in a warm or cold background.

The spheres are found in the image (`hot_spheres_finding`), then fitted together: a ball of the hot level with a cold
wall in a local background each, blurred by one Gaussian with an in-plane and an axial width (`hot_spheres_fit`).
The recovery coefficients in the record are those of `recovery`, relative to the fitted hot level.
"""

from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from evenblur.phantoms.base import Flag, Measurement, MeasurementError, Width
from evenblur.phantoms.blurred_sphere import blurred_ball
from evenblur.phantoms.hot_spheres_checks import (
    compare_halves,
    inflated_errors,
    leave_one_out,
    noise_fwhm_mm,
    odd_spheres,
    other_objects,
    radial_residuals,
    residual_flags,
    sphere_blocks,
    width_variation,
)
from evenblur.phantoms.hot_spheres_finding import Found, find_spheres
from evenblur.phantoms.hot_spheres_fit import (
    Sphere,
    SphereModel,
    choose_voxels,
    fit_spheres,
    without_spheres,
)
from evenblur.phantoms.hot_spheres_pictures import sphere_slices
from evenblur.phantoms.hot_spheres_record import (
    Fitted,
    Setting,
    Triple,
    radial_profile,
    recovery_table,
    sphere_table,
    triple,
)
from evenblur.phantoms.recovery import DEFINITIONS
from evenblur.statistics import MINIMUM_BLOCKS
from evenblur.widths import FWHM_PER_SIGMA

Array = NDArray[np.float64]

_LEAST_CENTRE = 0.25  # a sphere whose centre recovers less than this share is too small for the resolution
_LEAST_DIAMETER_WIDTHS = 1.5  # below it no sphere tells its level and the width apart
_WORST_RESIDUAL = 0.07  # residuals along the surface, over the contrast, beyond which the object is no sphere
_FEWEST_VOXELS_A_WIDTH = 1.5
_CONTRAST_TOLERANCE = 0.2
_PASSES = 3


def measure(volume: Array, *, voxel_mm: Triple, details: Mapping[str, Any]) -> Measurement:
    """In-plane and axial width from an image of fillable hot spheres.

    Parameters
    ----------
    volume
        Image, shape (x, y, z), z axial, any unit.
    voxel_mm
        Voxel size, mm.
    details
        `diameters_mm`: inner diameters of the spheres, mm. `wall_mm` (default 1): thickness of the cold wall, mm.
        `contrast` (optional): true ratio of hot to background, only compared with the fitted one.

    Returns
    -------
    Measurement
        Both widths, from a least-squares fit of all spheres together: shared widths and hot level, each sphere's own
        centre and background. `se_mm` by leaving out one block at a time (sectors about the spheres, each wider than
        the noise's correlation). `fit` holds the spheres, their recovery coefficients (relative to the fitted hot
        level; definitions in `fit["recovery_definitions"]`), two halves' widths, a radial profile and slices.

    Raises
    ------
    MeasurementError
        If the image is no finite volume, shows too few of the spheres, or what it shows is not their shape.

    Notes
    -----
    The model is a continuous object convolved with a Gaussian and sampled at the voxel centres (see
    `blurred_sphere`). A sphere that is not found, is cut by the field's edge, is too small for the resolution or does
    not have the common hot level is left out and flagged. Voxels under another object's influence (body's edge, cold
    insert) are left out too.

    >>> import numpy as np
    >>> axis = (np.arange(30) - 14.5) * 2.0
    >>> sigma_mm = 6.0 / 2.3548200450309493
    >>> image = blurred_ball(axis, axis, axis, radius_mm=11.0, sigma_in_plane_mm=sigma_mm, sigma_axial_mm=sigma_mm)
    >>> found = measure(image, voxel_mm=(2.0, 2.0, 2.0), details={"diameters_mm": [22.0], "wall_mm": 0.0})
    >>> round(found.in_plane.fwhm_mm, 3), round(found.axial.fwhm_mm, 3)
    (6.0, 6.0)
    """
    setting = _checked(volume, voxel_mm=voxel_mm, details=details)
    found = find_spheres(setting.volume, voxel_mm=voxel_mm, diameters_mm=setting.diameters_mm, wall_mm=setting.wall_mm)
    flags: list[Flag] = []
    fitted = _fit(setting, found, flags)
    blocks = sphere_blocks(
        fitted.voxels, voxel_mm=voxel_mm, spheres=fitted.spheres, fit=fitted.fit, noise_mm=_noise_mm(fitted, voxel_mm)
    )
    radial = radial_residuals(
        fitted.data, voxels=fitted.voxels, voxel_mm=voxel_mm, spheres=fitted.spheres, fit=fitted.fit, blocks=blocks
    )
    if radial.rms > _WORST_RESIDUAL:
        raise MeasurementError(
            f"the bright spots are not the listed spheres: a blurred sphere misses their edges by "
            f"{100 * radial.rms:.0f} % of the contrast"
        )
    flags += residual_flags(radial)
    errors = leave_one_out(fitted.fit.residuals, jacobian=fitted.fit.jacobian, blocks=blocks)
    if errors.se is None:
        flags.append(
            Flag(
                "too_few_blocks",
                f"the spheres give {errors.blocks} independent blocks of data; {MINIMUM_BLOCKS} are needed for a "
                "standard error",
                float(errors.blocks),
            )
        )
    widths = [Width(fwhm, None, None) for fwhm in fitted.fwhm_mm]
    se_mm: tuple[float, float] | None = None
    sigmas = inflated_errors(
        errors, blocks=blocks, spheres=fitted.spheres, fit=fitted.fit, noise_mm=_noise_mm(fitted, voxel_mm)
    )
    if sigmas is not None and errors.df is not None:
        se_mm = (FWHM_PER_SIGMA * sigmas[0], FWHM_PER_SIGMA * sigmas[1])
        widths = [Width(fitted.fwhm_mm[k], se_mm[k], float(errors.df[k])) for k in range(2)]
    halves, halves_flags = compare_halves(fitted.fit, blocks=blocks, se_mm=se_mm)
    own_widths, variation_flags = width_variation(
        fitted.fit, voxels=fitted.voxels, blocks=blocks, spheres=fitted.spheres
    )
    flags += halves_flags + variation_flags + _sampling_flags(fitted, voxel_mm) + _contrast_flags(setting, fitted)
    record = {
        "hot": fitted.fit.hot,
        "wall_mm": setting.wall_mm,
        "spheres": sphere_table(fitted),
        "blocks": errors.blocks,
        "voxels": int(fitted.data.size),
        "residual_share": round(float(np.std(fitted.fit.residuals)) / fitted.fit.hot, 6),
        "edge_misfit_share": round(radial.rms, 6),
        "own_widths": own_widths,
        "halves": halves,
        "recovery": recovery_table(setting, fitted),
        "recovery_definitions": dict(DEFINITIONS) | {"relative_to": "the fitted hot level, background not subtracted"},
        "profile": radial_profile(setting, fitted),
        "slices": sphere_slices(setting, fitted),
    }
    return Measurement(in_plane=widths[0], axial=widths[1], flags=tuple(flags), fit=record)


def _checked(volume: Array, *, voxel_mm: Triple, details: Mapping[str, Any]) -> Setting:
    if volume.ndim != 3 or min(volume.shape) < 4:
        raise MeasurementError(f"a volume with at least 4 voxels a side is needed, got shape {volume.shape}")
    if not np.all(np.isfinite(volume)):
        share = 100.0 * float(np.mean(~np.isfinite(volume)))
        raise MeasurementError(f"{share:.2g} % of the voxels have no finite value")
    if not np.any(volume > 0):
        raise MeasurementError("the image shows no activity")
    diameters = tuple(float(d) for d in details["diameters_mm"])
    wall = details.get("wall_mm")
    wall = 1.0 if wall is None else float(wall)
    if not diameters or min(diameters) <= 0 or wall < 0:
        raise MeasurementError("the details need at least one positive diameter, and a wall that is not negative")
    contrast = details.get("contrast")
    return Setting(
        np.asarray(volume, dtype=np.float64), voxel_mm, diameters, wall, None if contrast is None else float(contrast)
    )


def _fit(setting: Setting, found: Found, flags: list[Flag]) -> Fitted:
    """Fit the found spheres together, leaving out in turn what does not belong; appends the flags that tell so."""
    centres = dict(found.spheres)
    sigmas = (found.sigma_mm, found.sigma_mm)
    _flag_missing(setting, centres, sigmas, flags)
    parameters = np.array([*sigmas, found.hot])
    backgrounds = dict.fromkeys(centres, found.background)
    excluded: NDArray[np.bool_] | None = None
    fitted: Fitted | None = None
    for turn in range(_PASSES):
        _leave_out_small(setting, centres, parameters, flags)
        _require(setting, centres, parameters)
        numbers = tuple(sorted(centres))
        spheres = tuple(Sphere(setting.diameters_mm[k] / 2.0, centres[k]) for k in numbers)
        fitted = _fit_once(setting, numbers, spheres, parameters, [backgrounds[k] for k in numbers], excluded)
        fit = fitted.fit
        if not fit.hot > max(fit.background(k) for k in range(len(numbers))):
            raise MeasurementError("the spheres are not hotter than their surroundings")
        parameters = fit.parameters[:3]
        centres = {k: triple(fit.centre_mm(i)) for i, k in enumerate(numbers)}
        backgrounds = {k: fit.background(i) for i, k in enumerate(numbers)}
        if turn == _PASSES - 1:
            break
        odd = odd_spheres(fit, voxels=fitted.voxels, spheres=spheres)
        if len(odd) < len(numbers):
            for i, ratio in odd:
                flags.append(
                    Flag(
                        "sphere_differs",
                        f"the {setting.diameters_mm[numbers[i]]:g} mm sphere has {ratio:.2f} times the common level "
                        "(air, filling or diameter wrong?); it is left out",
                        round(ratio, 4),
                    )
                )
                del centres[numbers[i]]
        rest = without_spheres(
            setting.volume, voxel_mm=setting.voxel_mm, spheres=spheres, wall_mm=setting.wall_mm, fit=fit
        )
        excluded = other_objects(
            rest,
            voxel_mm=setting.voxel_mm,
            voxels=fitted.voxels,
            fit=fit,
            spheres=spheres,
            wall_mm=setting.wall_mm,
        )
    assert fitted is not None
    _require(setting, centres, parameters)
    if not fitted.fit.settled:
        flags.append(Flag("fit_not_settled", "the fit was still moving when its steps ran out"))
    return fitted


def _noise_mm(fitted: Fitted, voxel_mm: Triple) -> float:
    """Width of the noise's correlation; 0 where the residuals are too small to be noise."""
    if float(np.std(fitted.fit.residuals)) < 1e-3 * fitted.fit.hot:
        return 0.0
    return noise_fwhm_mm(fitted.fit.residuals, voxels=fitted.voxels, voxel_mm=voxel_mm)


def _fit_once(
    setting: Setting,
    numbers: tuple[int, ...],
    spheres: tuple[Sphere, ...],
    parameters: Array,
    backgrounds: list[float],
    excluded: NDArray[np.bool_] | None,
) -> Fitted:
    in_plane, axial = FWHM_PER_SIGMA * parameters[0], FWHM_PER_SIGMA * parameters[1]
    voxels = choose_voxels(
        setting.volume.shape,
        voxel_mm=setting.voxel_mm,
        spheres=spheres,
        wall_mm=setting.wall_mm,
        fwhm_in_plane_mm=max(in_plane, 1.5 * max(setting.voxel_mm[:2])),
        fwhm_axial_mm=max(axial, 1.5 * setting.voxel_mm[2]),
        excluded=excluded,
    )
    model = SphereModel(
        setting.volume.shape,
        voxel_mm=setting.voxel_mm,
        spheres=spheres,
        wall_mm=setting.wall_mm,
        voxels=voxels,
        reach_sigma_mm=(float(parameters[0]), float(parameters[1])),
    )
    data = setting.volume[tuple(voxels.index.T)]
    if data.size < 4 * model.parameter_count or np.unique(voxels.owner).size < len(spheres):
        raise MeasurementError("too few voxels are left about the spheres")
    each = [value for s, b in zip(spheres, backgrounds, strict=True) for value in (*s.centre_mm, b)]
    fit = fit_spheres(data, model=model, start=np.array([*parameters, *each]))
    return Fitted(numbers, spheres, voxels, data, fit)


def _centre_share(diameter_mm: float, sigmas: Array | tuple[float, float]) -> float:
    """What share of the hot level a blurred sphere's centre shows."""
    at = np.zeros(1)
    widths = {"sigma_in_plane_mm": float(sigmas[0]), "sigma_axial_mm": float(sigmas[1])}
    return float(blurred_ball(at, at, at, radius_mm=diameter_mm / 2.0, **widths).item())


def _flag_missing(setting: Setting, centres: dict[int, Triple], sigmas: tuple[float, float], flags: list[Flag]) -> None:
    """Flag what was not found, and leave out what the field's edge cuts."""
    last = (np.array(setting.volume.shape) - 0.5) * np.array(setting.voxel_mm)
    for k, diameter in enumerate(setting.diameters_mm):
        if k not in centres:
            if _centre_share(diameter, sigmas) < _LEAST_CENTRE:
                flags.append(_too_small(diameter))
            else:
                flags.append(
                    Flag(
                        "sphere_not_found",
                        f"no spot of the {diameter:g} mm sphere's size and brightness was found",
                        diameter,
                    )
                )
            continue
        centre = np.array(centres[k])
        inside = np.minimum(centre + 0.5 * np.array(setting.voxel_mm), last - centre).min()
        if inside < diameter / 2.0 + setting.wall_mm:
            flags.append(
                Flag(
                    "object_cut",
                    f"the {diameter:g} mm sphere reaches the edge of the field (its centre lies {inside:.1f} mm from "
                    "it); it is left out",
                    round(float(inside), 2),
                )
            )
            del centres[k]


def _too_small(diameter_mm: float) -> Flag:
    return Flag(
        "sphere_too_small",
        f"the {diameter_mm:g} mm sphere is too small for this resolution; it is left out",
        diameter_mm,
    )


def _leave_out_small(setting: Setting, centres: dict[int, Triple], parameters: Array, flags: list[Flag]) -> None:
    for k in sorted(centres):
        if _centre_share(setting.diameters_mm[k], parameters) < _LEAST_CENTRE:
            flags.append(_too_small(setting.diameters_mm[k]))
            del centres[k]


def _require(setting: Setting, centres: dict[int, Triple], parameters: Array) -> None:
    """Refuse where too few of the spheres are there to speak."""
    shown = [d for d in setting.diameters_mm if _centre_share(d, parameters) >= _LEAST_CENTRE]
    used = [setting.diameters_mm[k] for k in centres]
    if not used or 2 * len(used) < len(shown):
        raise MeasurementError(
            f"{len(used)} of the {len(shown)} listed spheres that this resolution should show can be used; "
            "at least half of them are needed"
        )
    fwhm = FWHM_PER_SIGMA * float(max(parameters[:2]))
    if max(used) < _LEAST_DIAMETER_WIDTHS * fwhm:
        raise MeasurementError(
            f"the largest usable sphere ({max(used):g} mm) is under {_LEAST_DIAMETER_WIDTHS} times the width that "
            f"would explain it ({fwhm:.1f} mm): level and width cannot be told apart"
        )


def _sampling_flags(fitted: Fitted, voxel_mm: Triple) -> list[Flag]:
    flags = []
    steps = (max(voxel_mm[0], voxel_mm[1]), voxel_mm[2])
    for name, fwhm, step in zip(("in-plane", "axial"), fitted.fwhm_mm, steps, strict=True):
        if fwhm < _FEWEST_VOXELS_A_WIDTH * step:
            flags.append(
                Flag(
                    "under_sampled_width",
                    f"only {fwhm / step:.2f} voxels lie across the {name} width",
                    round(fwhm / step, 3),
                )
            )
    return flags


def _contrast_flags(setting: Setting, fitted: Fitted) -> list[Flag]:
    if setting.contrast is None:
        return []
    background = float(np.mean([fitted.fit.background(k) for k in range(len(fitted.spheres))]))
    # A background within 0.1 % of nothing is none: the ratio has no value then.
    ratio = fitted.fit.hot / background if background > 1e-3 * fitted.fit.hot else None
    if ratio is not None and abs(ratio / setting.contrast - 1.0) <= _CONTRAST_TOLERANCE:
        return []
    seen = "no background at all" if ratio is None else f"a contrast of {ratio:.2f}"
    return [
        Flag(
            "contrast_differs",
            f"the fit gives {seen}, the table says {setting.contrast:g}",
            None if ratio is None else round(ratio, 3),
        )
    ]
