"""Recovery coefficients against closed forms, published tables and counting by hand."""

import numpy as np
import pytest
from scipy import integrate, special

from evenblur.phantoms.recovery import (
    PEAK_RADIUS_MM,
    half_contour_mean,
    peak_mean,
    recovery,
    sphere_maximum,
)
from sphere_simulation import FWHM_PER_SIGMA, add_ball

FINE_MM = (1.0, 1.0, 1.0)


def blurred_profile(r, radius, sigma):
    """A ball blurred alike in all directions, in closed form."""
    near, far = (radius - r) / (np.sqrt(2) * sigma), (radius + r) / (np.sqrt(2) * sigma)
    return 0.5 * (special.erf(near) + special.erf(far)) - sigma / (r * np.sqrt(2 * np.pi)) * (
        np.exp(-(near**2)) - np.exp(-(far**2))
    )


def fine_ball(diameter_mm, fwhm_mm, size=61):
    image = np.zeros((size, size, size))
    centre = (size // 2 * 1.0,) * 3
    sigma = (fwhm_mm / FWHM_PER_SIGMA,) * 3
    add_ball(image, voxel_mm=FINE_MM, centre_mm=centre, radius_mm=diameter_mm / 2.0, sigma_mm=sigma, value=1.0)
    return image, centre


def test_peak_ball_holds_one_millilitre():
    assert 4.0 / 3.0 * np.pi * PEAK_RADIUS_MM**3 == pytest.approx(1000.0, rel=1e-12)


@pytest.mark.parametrize(
    ("diameter_mm", "fwhm_mm", "maximum", "contour_mean"),
    # Published table of closed forms: centre value, and mean inside the contour at half the maximum, cold background.
    [(10, 8, 0.4613, 0.3105), (17, 8, 0.9004, 0.6242), (28, 8, 0.9993, 0.7706), (13, 6, 0.9106, 0.6330)],
)
def test_maximum_and_contour_mean_meet_the_tabulated_values(diameter_mm, fwhm_mm, maximum, contour_mean):
    image, centre = fine_ball(diameter_mm, fwhm_mm)
    found = recovery(image, voxel_mm=FINE_MM, centre_mm=centre, diameter_mm=diameter_mm, background=0.0, true_level=1.0)
    assert found.maximum == pytest.approx(maximum, abs=6e-5)  # the table's four digits
    # Whole voxels of 1 mm follow the contour: the mean hangs on a shell of about half a voxel.
    assert found.half_contour_mean == pytest.approx(contour_mean, abs=0.02)


@pytest.mark.parametrize(("diameter_mm", "fwhm_mm"), [(10, 5), (17, 8), (28, 6)])
def test_peak_is_the_mean_in_a_millilitre_about_the_centre(diameter_mm, fwhm_mm):
    image, centre = fine_ball(diameter_mm, fwhm_mm)
    radius, sigma = diameter_mm / 2.0, fwhm_mm / FWHM_PER_SIGMA
    total = integrate.quad(lambda r: r**2 * blurred_profile(r, radius, sigma), 1e-6, PEAK_RADIUS_MM)[0]
    expected = 3.0 * total / PEAK_RADIUS_MM**3
    found = peak_mean(image, voxel_mm=FINE_MM, centre_mm=centre, search_mm=radius)
    # Voxels of 1 mm taken as constant act as a box of variance h^2 / 12 more blur: sigma^2 of 4.5 mm^2 (5 mm FWHM)
    # grows by 1.9 %, and the mean falls by less than that.
    assert found == pytest.approx(expected, rel=0.01)


def test_peak_follows_a_sphere_between_voxels():
    voxel = (4.0, 4.0, 4.0)
    on_voxel, between = np.zeros((20, 20, 20)), np.zeros((20, 20, 20))
    sigma = (7.0 / FWHM_PER_SIGMA,) * 3
    add_ball(on_voxel, voxel_mm=voxel, centre_mm=(40.0, 40.0, 40.0), radius_mm=6.5, sigma_mm=sigma, value=1.0)
    add_ball(between, voxel_mm=voxel, centre_mm=(42.0, 42.0, 42.0), radius_mm=6.5, sigma_mm=sigma, value=1.0)
    first = peak_mean(on_voxel, voxel_mm=voxel, centre_mm=(40.0, 40.0, 40.0), search_mm=6.5)
    second = peak_mean(between, voxel_mm=voxel, centre_mm=(42.0, 42.0, 42.0), search_mm=6.5)
    # Between voxels of 4 mm the highest voxel falls much more than the mean in the ball does.
    assert abs(second - first) / first < 0.05
    assert between.max() < 0.85 * on_voxel.max()


def test_peak_needs_a_ball_within_the_image():
    assert peak_mean(np.ones((4, 4, 4)), voxel_mm=(2.0, 2.0, 2.0), centre_mm=(3.0, 3.0, 3.0), search_mm=2.0) is None


def test_contour_counts_by_hand_and_stays_connected():
    image = np.zeros((7, 7, 7))
    image[3, 3, 2:5] = [6.0, 10.0, 5.0]
    image[3, 3, 6] = 9.0  # above the contour but not connected
    settings = {"voxel_mm": (1.0, 1.0, 1.0), "peak_index": (3, 3, 3)}
    assert half_contour_mean(image, background=0.0, reach_mm=10.0, **settings) == pytest.approx(7.0)  # 6, 10, 5
    assert half_contour_mean(image, background=1.0, reach_mm=10.0, **settings) == pytest.approx(8.0)  # from 5.5: 6, 10
    assert half_contour_mean(image, background=0.0, reach_mm=0.5, **settings) == pytest.approx(10.0)


def test_maximum_is_looked_for_within_the_radius_only():
    image = np.zeros((9, 9, 9))
    image[4, 4, 5], image[4, 4, 8] = 2.0, 5.0
    settings = {"voxel_mm": (2.0, 2.0, 3.0), "centre_mm": (8.0, 8.0, 12.0)}
    assert sphere_maximum(image, radius_mm=4.0, **settings) == (2.0, (4, 4, 5))
    assert sphere_maximum(image, radius_mm=12.0, **settings) == (5.0, (4, 4, 8))
    assert sphere_maximum(image, radius_mm=0.1, **settings) == (0.0, (4, 4, 4))


def test_recovery_scales_with_the_true_level_and_needs_a_positive_one():
    image, centre = fine_ball(17, 6, size=41)
    settings = {"voxel_mm": FINE_MM, "centre_mm": centre, "diameter_mm": 17.0, "background": 0.0}
    one, two = (recovery(image, true_level=level, **settings) for level in (1.0, 2.0))
    assert (two.maximum, two.half_contour_mean, two.peak) == pytest.approx(
        (one.maximum / 2, one.half_contour_mean / 2, one.peak / 2), rel=1e-12
    )
    with pytest.raises(ValueError, match="positive"):
        recovery(image, true_level=0.0, **settings)


def test_centre_outside_the_image_is_refused():
    with pytest.raises(ValueError, match="outside"):
        sphere_maximum(np.ones((5, 5, 5)), voxel_mm=FINE_MM, centre_mm=(9.0, 2.0, 2.0), radius_mm=2.0)
