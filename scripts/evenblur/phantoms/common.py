"""What the kinds share: the first look at an image, and flags about its sampling."""

import numpy as np
from numpy.typing import NDArray

from evenblur.phantoms.base import Flag, MeasurementError, Width
from evenblur.statistics import Halves
from evenblur.widths import fwhm_from_sigma


def check_volume(volume: NDArray[np.float64], voxel_mm: tuple[float, float, float]) -> NDArray[np.float64]:
    """The image as float64, if it can be measured at all.

    Parameters
    ----------
    volume
        Image, shape (x, y, z).
    voxel_mm
        Voxel sizes, mm.

    Raises
    ------
    ValueError
        If the image is not 3-D or a voxel size is not positive.
    MeasurementError
        If it is empty, the same everywhere, or holds values that are not finite.

    Examples
    --------
    >>> check_volume(np.eye(9)[..., None], (1.0, 1.0, 1.0)).shape
    (9, 9, 1)
    """
    image = np.ascontiguousarray(volume, dtype=np.float64)
    if image.ndim != 3:
        raise ValueError(f"volume must have 3 axes, got {image.ndim}")
    if len(voxel_mm) != 3 or not all(np.isfinite(v) and v > 0 for v in voxel_mm):
        raise ValueError(f"voxel_mm must be three positive lengths, got {voxel_mm}")
    if image.size == 0:
        raise MeasurementError("the image has no voxels")
    bad = image.size - int(np.count_nonzero(np.isfinite(image)))
    if bad:
        raise MeasurementError(f"{bad} voxels of the image are not finite numbers")
    if float(image.max()) == float(image.min()):
        raise MeasurementError("the image is the same everywhere")
    if min(image.shape[:2]) < 8:
        raise MeasurementError(f"the image has only {image.shape[0]} by {image.shape[1]} voxels across")
    return image


def sampling_flags(in_plane: Width | None, axial: Width | None, voxel_mm: tuple[float, float, float]) -> list[Flag]:
    """Flag widths with fewer than 1.5 voxels across them: sampling then hides part of the blur.

    Examples
    --------
    >>> [flag.value for flag in sampling_flags(Width(5.0, None, None), None, (4.0, 4.0, 3.0))]
    [1.25]
    """
    flags = []
    for name, width, step in (("in-plane", in_plane, max(voxel_mm[:2])), ("axial", axial, voxel_mm[2])):
        if width is not None and width.fwhm_mm < 1.5 * step:
            voxels = width.fwhm_mm / step
            flags.append(
                Flag(
                    "under_sampled_width",
                    f"Only {voxels:.1f} voxels lie across the {name} width: the image "
                    "is too coarse to measure it well.",
                    round(voxels, 3),
                )
            )
    return flags


def halves_of_width(
    halves: Halves, *, at: int, sigma_mm: float, words: str, least_mm: float, errors: float, inflation: float = 1.0
) -> tuple[dict[str, float | None], list[Flag]]:
    """One width from either half of the data: its entry for `fit["halves"]`, and a flag where they disagree.

    Parameters
    ----------
    halves
        From `evenblur.statistics.two_halves`.
    at
        Place of the width's sigma among the parameters.
    sigma_mm
        That sigma in the common fit, mm.
    words
        The direction in words.
    least_mm, errors
        A difference beyond both this size (mm) and this many of its standard errors is flagged.
    inflation
        What the blocks' own error has to be multiplied by.

    Examples
    --------
    >>> one = np.array([0.1])
    >>> halves_of_width(
    ...     Halves(one, -one, 2 * one, one), at=0, sigma_mm=2.0, words="axial", least_mm=0.2, errors=4.0
    ... )[0]["first_mm"]
    4.9451
    """
    difference = fwhm_from_sigma(float(halves.difference[at]))
    se = None if halves.se is None else fwhm_from_sigma(float(halves.se[at])) * inflation
    entry = {
        "first_mm": round(fwhm_from_sigma(sigma_mm + float(halves.first[at])), 4),
        "second_mm": round(fwhm_from_sigma(sigma_mm + float(halves.second[at])), 4),
        "difference_mm": round(difference, 4),
        "se_mm": None if se is None else round(se, 4),
    }
    if se is None or abs(difference) <= least_mm or abs(difference) <= errors * se:
        return entry, []
    text = (
        f"Two halves of the data give {words} widths that differ by {abs(difference):.2f} mm, more than the noise "
        "explains."
    )
    return entry, [Flag("halves_disagree", text, round(difference, 4))]
