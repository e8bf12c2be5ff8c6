"""Recovery and noise against general libraries and brute force."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import integrate, ndimage, stats

from evenblur.partial_volume import correlated_noise_factor, slab_recovery, sphere_recovery
from evenblur.widths import sigma_from_fwhm


@pytest.mark.parametrize(("diameter", "fwhm"), [(5.0, 8.0), (10.0, 6.0), (15.0, 10.0), (20.0, 5.0)])
def test_the_middle_of_a_sphere_is_the_chance_of_a_gaussian_step_to_stay_inside(diameter, fwhm):
    # The squared length of a three-dimensional normal step over sigma^2 follows the chi-square law with 3 degrees.
    expected = stats.chi2.cdf((diameter / 2 / sigma_from_fwhm(fwhm)) ** 2, 3)
    assert sphere_recovery(diameter, in_plane_mm=fwhm, axial_mm=fwhm) == pytest.approx(expected, abs=1e-12)


@pytest.mark.parametrize(("in_plane", "axial"), [(8.0, 6.0), (5.0, 9.0), (0.0, 6.0), (6.0, 0.0), (7.0, 7.0001)])
def test_unequal_widths_agree_with_an_integral_over_shells(in_plane, axial):
    diameter, s, t = 10.0, sigma_from_fwhm(in_plane), sigma_from_fwhm(axial)
    got = sphere_recovery(diameter, in_plane_mm=in_plane, axial_mm=axial)
    if t == 0:
        expected = 1 - np.exp(-(5.0**2) / (2 * s**2))
    elif s == 0:
        expected = stats.norm.cdf(5.0 / t) - stats.norm.cdf(-5.0 / t)
    else:  # by the angle and the distance from the middle, not by discs

        def density(r, u):
            across, along = r * np.sqrt(1 - u**2), r * u
            return r**2 * np.exp(-(across**2) / (2 * s**2) - along**2 / (2 * t**2)) / (np.sqrt(2 * np.pi) * s**2 * t)

        expected = integrate.dblquad(density, -1, 1, 0, diameter / 2)[0]
    assert got == pytest.approx(expected, abs=1e-8)


def test_a_ribbon_is_a_difference_of_normal_laws():
    sigma = sigma_from_fwhm(6.6)
    expected = stats.norm.cdf(1.5 / sigma) - stats.norm.cdf(-1.5 / sigma)
    assert slab_recovery(3.0, fwhm_mm=6.6) == pytest.approx(expected, abs=1e-12)
    assert slab_recovery(3.0, fwhm_mm=0.0) == 1.0


@given(st.floats(3.0, 12.0), st.floats(3.0, 12.0), st.floats(2.0, 40.0))
def test_wider_blur_never_shows_more(in_plane, axial, diameter):
    value = sphere_recovery(diameter, in_plane_mm=in_plane, axial_mm=axial)
    assert 0.0 < value <= 1.0
    assert sphere_recovery(diameter, in_plane_mm=in_plane + 1.0, axial_mm=axial) <= value + 1e-12


def test_correlated_noise_is_lowered_as_a_simulation_lowers_it():
    rng = np.random.default_rng(5)
    own, kernel = 5.0, (6.0, 4.0)  # filter of the noise and kernel, FWHM in voxels of 1 mm
    noise = ndimage.gaussian_filter(rng.standard_normal((96, 96, 96)), sigma_from_fwhm(own), mode="wrap")
    after = ndimage.gaussian_filter(noise, [sigma_from_fwhm(kernel[0])] * 2 + [sigma_from_fwhm(kernel[1])], mode="wrap")
    correlation = (own * np.sqrt(2.0),) * 2
    expected = correlated_noise_factor(correlation, in_plane_mm=kernel[0], axial_mm=kernel[1])
    # Some 7,000 independent places: the ratio of two spreads is known to about 1 %.
    assert after.std() / noise.std() == pytest.approx(expected, rel=0.03)


@pytest.mark.parametrize("wrong", [(0.0, 5.0), (-1.0, 5.0), (3.0, -1.0), (float("nan"), 5.0)])
def test_lengths_and_widths_that_make_no_sense_are_refused(wrong):
    with pytest.raises(ValueError, match="positive"):
        slab_recovery(wrong[0], fwhm_mm=wrong[1])
