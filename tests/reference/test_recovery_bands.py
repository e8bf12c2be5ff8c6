"""Published recovery bands against spheres that the engine smoothed."""

from functools import lru_cache

import numpy as np
import pytest

from evenblur.phantoms.recovery import half_contour_mean, sphere_maximum
from evenblur.smoothing import smooth_volume
from reference_formulas import missing, quadrature
from sphere_simulation import STANDARD_DIAMETERS_MM, ring_centres, sphere_phantom

# 10, 13, 17, 22, 28, 37 mm: mean inside the contour at half between background and maximum, and maximum.
MEAN_BAND = ([0.27, 0.44, 0.57, 0.63, 0.72, 0.76], [0.43, 0.60, 0.73, 0.78, 0.85, 0.89])
MAXIMUM_BAND = ([0.34, 0.59, 0.73, 0.83, 0.91, 0.95], [0.57, 0.85, 1.01, 1.09, 1.13, 1.16])
SOURCE = "EARL accreditation specifications, standards 1, January 2017, tables 1 and 2; also Koopman et al., table 3"
FILL = "fill 10:1 as in two papers on compliance with it"

VOXEL_MM = (2.0, 2.0, 2.0)
SHAPE = (88, 88, 44)
CENTRES = ring_centres((87.0, 87.0, 43.0))


@pytest.fixture(scope="module")
def sharp():
    """Six spheres, activity 10 in a background of 1, by their width and the thickness of their cold walls (mm)."""

    @lru_cache
    def image(fwhm_mm, wall_mm=0.0):
        return sphere_phantom(
            SHAPE, voxel_mm=VOXEL_MM, centres_mm=CENTRES, fwhm_mm=(fwhm_mm,) * 2, wall_mm=wall_mm, hot=10.0
        )

    return image


def recoveries(volume):
    """Contour means and maxima over the true activity, the background left in."""
    means, maxima = [], []
    for centre, diameter in zip(CENTRES, STANDARD_DIAMETERS_MM, strict=True):
        highest, index = sphere_maximum(volume, voxel_mm=VOXEL_MM, centre_mm=centre, radius_mm=diameter / 2.0)
        mean = half_contour_mean(
            volume, voxel_mm=VOXEL_MM, peak_index=index, background=1.0, reach_mm=diameter + 2.0 * VOXEL_MM[0]
        )
        means.append(mean / 10.0)
        maxima.append(highest / 10.0)
    return means, maxima


def smoothed(image, added_mm):
    return smooth_volume(image, voxel_mm=VOXEL_MM, fwhm_mm=(added_mm,) * 3).astype(float)


def outside(means, maxima):
    """How many of the twelve values lie outside their bands."""
    return sum(
        not low <= value <= high
        for (lows, highs), values in ((MEAN_BAND, means), (MAXIMUM_BAND, maxima))
        for low, value, high in zip(lows, values, highs, strict=True)
    )


@pytest.mark.parametrize("total_mm", [7.5, 8.0, 8.5])
def test_spheres_brought_to_the_width_of_the_standard_lie_in_all_bands(check, sharp, total_mm):
    means, maxima = recoveries(smoothed(sharp(5.0), missing(5.0, total_mm)))
    for what, band, found in (("contour mean", MEAN_BAND, means), ("maximum", MAXIMUM_BAND, maxima)):
        check.inside(
            f"{what} of six spheres brought from 5 to {total_mm:g} mm",
            source=f"{SOURCE}; {FILL}",
            low=band[0],
            high=band[1],
            found=found,
            digits=3,
            steady=0.002,
        )


def test_cold_walls_do_not_take_them_out(check, sharp):
    number = outside(*recoveries(smoothed(sharp(5.0, 1.0), missing(5.0, 8.0))))
    check.close(
        "values outside the twelve bands, spheres with walls of 1 mm (thickness from memory) brought from 5 to 8 mm",
        source=f"{SOURCE}; {FILL}",
        expected=0,
        found=number,
        within=0,
        digits=0,
    )


@pytest.mark.parametrize("total_mm", [6.0, 11.0])
def test_spheres_brought_to_another_width_leave_the_bands(check, sharp, total_mm):
    number = outside(*recoveries(smoothed(sharp(5.0), missing(5.0, total_mm))))
    check.inside(
        f"values outside the twelve bands, spheres brought from 5 to {total_mm:g} mm",
        source=f"{SOURCE}; {FILL}",
        low=1,
        high=12,
        found=number,
        digits=0,
        steady=0,
    )


@pytest.mark.parametrize("total_mm", [4.0, 5.0, 6.0])
def test_a_filter_of_7_mm_brings_current_cameras_into_the_bands(check, sharp, total_mm):
    number = outside(*recoveries(smoothed(sharp(total_mm), 7.0)))
    check.close(
        f"values outside the twelve bands, {total_mm:g} mm smoothed by 7 mm (to {quadrature(total_mm, 7.0):.2f} mm)",
        source="EJNMMI Phys 2019, 10.1186/s40658-019-0257-8, abstract: 7 mm from standards 2 to standards 1; "
        "4 to 6 mm for whole-body PET: Schäfers 2008, Physica Medica, abstract",
        expected=0,
        found=number,
        within=0,
        digits=0,
    )


def test_range_of_widths_that_lie_in_all_bands(check, sharp):
    # The range of the closed forms, 7.5 to 9.3 mm, was found apart from this code, in steps of 0.05 mm.
    widths = np.arange(6.0, 11.01, 0.25)
    good = [w for w in widths if outside(*recoveries(smoothed(sharp(5.0), missing(5.0, w)))) == 0]
    check.close(
        "narrowest and widest total in all twelve bands, in steps of 0.25 mm",
        source=f"{SOURCE}; range of continuous spheres in closed form, 7.50 to 9.30 mm",
        expected=[7.5, 9.25],
        found=[min(good), max(good)],
        # Voxels of 2 mm make the contour ragged and miss the maximum by a little.
        within=0.5,
        digits=2,
        unit="mm",
    )
