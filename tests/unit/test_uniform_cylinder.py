"""The cylinder's widths against invented cylinders made in Fourier space, and what wrong images lead to."""

import numpy as np
import pytest
from scipy import stats

import simulation
from benchmarks import width_statistics
from evenblur.phantoms.base import MeasurementError
from evenblur.phantoms.blocks import shortfall
from evenblur.phantoms.disc import DiscTable, disc_profile
from evenblur.phantoms.uniform_cylinder import measure

VOXEL = (2.0, 2.0, 3.0)
ENDLESS = (-1e6, 1e6)
EXACT_MM = 0.05  # the promise for noise-free images


def codes(found):
    return {flag.code for flag in found.flags}


def cylinder(
    *, ends=ENDLESS, radius=40.0, in_plane=6.0, axial=7.0, shape=(64, 62, 24), voxel=VOXEL, centre=(63.3, 60.2)
):
    return simulation.straight_cylinder(
        shape, voxel_mm=voxel, centre_mm=centre, radius_mm=radius, ends_mm=ends, in_plane_mm=in_plane, axial_mm=axial
    )


@pytest.mark.parametrize(("radius", "sigma"), [(100.0, 1.3), (30.0, 6.4), (8.0, 4.0), (4.0, 6.0)])
def test_blurred_disc_is_the_noncentral_chi_square_distribution(radius, sigma):
    rho = np.linspace(0.0, radius + 6 * sigma, 60)
    expected = stats.ncx2.cdf((radius / sigma) ** 2, 2, np.maximum(rho / sigma, 1e-9) ** 2)
    np.testing.assert_allclose(disc_profile(rho, radius_mm=radius, sigma_mm=sigma), expected, atol=1e-10)


def test_disc_table_agrees_with_the_exact_profile_between_its_nodes():
    rho = np.linspace(20.0, 60.0, 777)
    table = DiscTable.build(radius_mm=40.0, sigma_low_mm=2.0, sigma_high_mm=2.6)
    values, by_rho, by_sigma, by_radius = table.evaluate(rho, np.full_like(rho, 2.5), 40.0)

    def exact(r, radius, sigma):
        return disc_profile(r, radius_mm=radius, sigma_mm=sigma)

    np.testing.assert_allclose(values, exact(rho, 40.0, 2.5), atol=3e-5)  # linear in steps of 0.02 sigma: h^2 / 8 / 2
    h = 1e-4
    # Slopes are constant within a step: an error of half a step times the curvature, 0.01 × 0.25 / sigma.
    np.testing.assert_allclose(by_rho, (exact(rho + h, 40, 2.5) - exact(rho - h, 40, 2.5)) / 2 / h, atol=3e-3)
    np.testing.assert_allclose(by_sigma, (exact(rho, 40, 2.5 + h) - exact(rho, 40, 2.5 - h)) / 2 / h, atol=5e-3)
    np.testing.assert_allclose(by_radius, (exact(rho, 40 + h, 2.5) - exact(rho, 40 - h, 2.5)) / 2 / h, atol=3e-3)


def test_share_that_blocks_keep_agrees_with_sums_over_a_long_noisy_line():
    # White noise after a Gaussian of 5 samples FWHM has an autocorrelation of 5 sqrt(2); blocks of 30 samples.
    noise = simulation.gaussian_noise((240_000,), fwhm_mm=5.0, voxel_mm=(1.0,), rng=np.random.default_rng(2))
    within = noise.reshape(-1, 30).sum(axis=1).var() / 30
    whole = noise.reshape(-1, 1200).sum(axis=1).var() / 1200
    # 200 long sums know their variance to 10 %.
    assert shortfall(5.0 * np.sqrt(2.0), block_mm=30.0) == pytest.approx(within / whole, rel=0.3)
    expected = 1.0 - np.sqrt(2.0 / np.pi) * 5.0 * np.sqrt(2.0) / simulation.FWHM_PER_SIGMA / 30.0
    assert shortfall(5.0 * np.sqrt(2.0), block_mm=30.0) == pytest.approx(expected, rel=1e-9)


def test_disc_profile_refuses_widths_that_are_not_positive():
    with pytest.raises(ValueError, match="sigma_mm"):
        disc_profile(1.0, radius_mm=1.0, sigma_mm=0.0)


@pytest.mark.parametrize(
    ("in_plane", "axial", "voxel"),
    [
        (3.0, 5.0, (2.0, 2.0, 3.0)),
        (6.0, 4.5, (2.0, 2.0, 3.0)),
        (6.0, 9.0, (4.0, 4.0, 4.0)),
        (12.0, 7.0, (4.0, 4.0, 4.0)),
        (15.0, 12.0, (4.0, 4.0, 5.0)),
    ],
)
def test_noise_free_widths_come_out_within_a_twentieth_of_a_millimetre(in_plane, axial, voxel):
    shape = tuple(round(n / step) for n, step in zip((144.0, 144.0, 180.0), voxel, strict=True))
    image = 5.0 + 20.0 * cylinder(
        ends=(41.3, 139.8), radius=45.0, in_plane=in_plane, axial=axial, shape=shape, voxel=voxel, centre=(70.3, 72.9)
    )
    found = measure(image, voxel_mm=voxel, details={"radius_mm": 45.0, "length_mm": 98.5})
    assert found.in_plane.fwhm_mm == pytest.approx(in_plane, abs=EXACT_MM)
    assert found.axial.fwhm_mm == pytest.approx(axial, abs=EXACT_MM)
    assert codes(found) <= {"under_sampled_width"}  # 1.5 voxels exactly may fall on either side
    assert found.fit["length_mm"] == pytest.approx(98.5, abs=EXACT_MM)
    assert found.fit["radius_mm"] == pytest.approx(45.0, abs=EXACT_MM)


@pytest.mark.parametrize("slope", [(0.09, 0.0), (-0.2, 0.12), (0.0, 0.364)])
def test_a_tilted_cylinder_gives_both_widths_from_its_wall_and_ends(slope):
    image = simulation.tilted_cylinder(
        (64, 64, 50),
        voxel_mm=VOXEL,
        centre_mm=(62.7, 63.9, 74.2),
        radius_mm=34.0,
        length_mm=90.0,
        in_plane_mm=5.0,
        axial_mm=8.0,
        slope=slope,
    )
    found = measure(image, voxel_mm=VOXEL, details={})
    assert found.in_plane.fwhm_mm == pytest.approx(5.0, abs=EXACT_MM)
    assert found.axial.fwhm_mm == pytest.approx(8.0, abs=EXACT_MM)
    assert found.fit["tilt_deg"] == pytest.approx(np.degrees(np.arctan(np.hypot(*slope))), abs=0.05)
    assert codes(found) == set()


def test_without_an_end_a_straight_cylinder_gives_no_axial_width():
    found = measure(cylinder(), voxel_mm=VOXEL, details={})
    assert found.in_plane.fwhm_mm == pytest.approx(6.0, abs=EXACT_MM)
    assert found.axial is None
    assert codes(found) == {"ends_not_seen"}


def test_a_small_tilt_neither_bends_the_in_plane_width_nor_makes_up_an_axial_one():
    image = simulation.endless_cylinder(
        (64, 64, 24),
        voxel_mm=VOXEL,
        centre_mm=(60.0, 63.0),
        radius_mm=40.0,
        in_plane_mm=4.0,
        axial_mm=10.0,
        slope=(0.08, 0.02),
    )
    found = measure(image, voxel_mm=VOXEL, details={})
    assert found.in_plane.fwhm_mm == pytest.approx(4.0, abs=EXACT_MM)
    assert found.axial is None


def test_a_large_tilt_tells_the_axial_width_and_says_so():
    image = simulation.endless_cylinder(
        (70, 64, 24),
        voxel_mm=VOXEL,
        centre_mm=(50.0, 63.0),
        radius_mm=40.0,
        in_plane_mm=4.0,
        axial_mm=8.0,
        slope=(0.34, 0.0),
    )
    found = measure(image, voxel_mm=VOXEL, details={})
    assert found.axial.fwhm_mm == pytest.approx(8.0, abs=EXACT_MM)
    assert found.axial.se_mm <= 0.5
    assert "axial_from_tilt" in codes(found)


def test_one_end_in_the_field_is_enough_for_the_axial_width():
    found = measure(cylinder(ends=(-1e6, 50.3)), voxel_mm=VOXEL, details={})
    assert found.axial.fwhm_mm == pytest.approx(7.0, abs=EXACT_MM)
    assert found.fit["length_mm"] is None


def test_cupping_and_slow_gradients_do_not_bend_the_width():
    image = cylinder(ends=(15.3, 1e6), shape=(64, 62, 40))
    x, y, z = np.meshgrid(
        *(np.arange(n) * s for n, s in zip(image.shape, VOXEL, strict=True)), indexing="ij", sparse=True
    )
    slow = 1.0 + 0.1 * ((x - 63.3) ** 2 + (y - 60.2) ** 2) / 1600.0 + 0.0005 * (z - 60.0) + 0.0005 * (x - 63.3)
    found = measure(image * slow, voxel_mm=VOXEL, details={})
    # The gradient under the edge moves it by g sigma^2 and hardly widens it; 0.05 mm is ten times what is left.
    assert found.in_plane.fwhm_mm == pytest.approx(6.0, abs=EXACT_MM)
    assert found.axial.fwhm_mm == pytest.approx(7.0, abs=EXACT_MM)


def test_a_warm_surround_is_no_matter():
    found = measure(100.0 + 50.0 * cylinder(), voxel_mm=VOXEL, details={})
    assert found.in_plane.fwhm_mm == pytest.approx(6.0, abs=EXACT_MM)


def test_a_cylinder_far_off_centre_is_found():
    found = measure(cylinder(shape=(110, 120, 20), centre=(60.2, 180.7)), voxel_mm=VOXEL, details={})
    assert found.in_plane.fwhm_mm == pytest.approx(6.0, abs=EXACT_MM)
    assert found.fit["centre_mm"][:2] == pytest.approx([60.2, 180.7], abs=0.01)


def test_width_does_not_depend_on_the_unit_or_on_mirroring():
    image = cylinder(ends=(15.3, 60.0), shape=(60, 56, 30))
    first = measure(image, voxel_mm=VOXEL, details={})
    scaled = measure(image * 37e6, voxel_mm=VOXEL, details={})
    mirrored = measure(image[::-1, :, ::-1], voxel_mm=VOXEL, details={})
    for other in (scaled, mirrored):
        # Two paths to one optimum: equal to a small part of the 0.0001 mm that records keep.
        assert other.in_plane.fwhm_mm == pytest.approx(first.in_plane.fwhm_mm, abs=1e-5)
        assert other.axial.fwhm_mm == pytest.approx(first.axial.fwhm_mm, abs=1e-5)


def test_noisy_width_lies_within_its_own_error():
    image = simulation.add_noise(
        cylinder(ends=(24.0, 1e6), shape=(64, 62, 30)), level=0.05, voxel_mm=VOXEL, rng=np.random.default_rng(11)
    )
    found = measure(image, voxel_mm=VOXEL, details={})
    for width, truth in ((found.in_plane, 6.0), (found.axial, 7.0)):
        assert 0.01 < width.se_mm < 0.3
        assert abs(width.fwhm_mm - truth) < 4.0 * width.se_mm  # one seed; four standard errors with ten df or more
    assert set(found.fit["halves"]["in_plane"]) == {"first_mm", "second_mm", "difference_mm", "se_mm"}
    # White noise after a 5 mm Gaussian has an autocorrelation of 5 sqrt(2) = 7.07 mm.
    assert found.fit["noise_correlation_mm"]["in_plane"] == pytest.approx(7.07, abs=1.0)


def test_twenty_noisy_images_scatter_no_more_than_promised_and_as_their_errors_say():
    row = width_statistics.run(width_statistics.uniform_cylinder_case(), noise=0.05, runs=20)[0]
    assert row.scatter <= 0.08  # the promise at 5 % noise
    assert abs(row.bias) < 4.0 * row.scatter / np.sqrt(20)  # four standard errors of a mean of 20
    assert 0.5 < row.ratio < 2.0  # the scatter of 20 is known to 16 %, a single se to some 15 %
    assert row.coverage >= 0.75  # binomial with p = 0.95: fewer than 15 of 20 happen once in 3000


def test_profile_for_the_figure_has_lists_of_one_length():
    profile = measure(cylinder(), voxel_mm=VOXEL, details={}).fit["profile"]
    lengths = {len(profile[key]) for key in ("position_mm", "measured", "fitted")}
    assert len(lengths) == 1
    assert 10 < lengths.pop() <= 200
    np.testing.assert_allclose(profile["measured"], profile["fitted"], atol=1e-4)
    middle = int(np.argmin(np.abs(profile["position_mm"])))
    assert profile["measured"][middle] == pytest.approx(0.5, abs=0.1)  # the edge crosses one half at its radius


def test_a_radius_or_length_other_than_the_table_says_is_flagged():
    found = measure(cylinder(ends=(15.3, 55.0)), voxel_mm=VOXEL, details={"radius_mm": 50.0, "length_mm": 80.0})
    assert {"radius_differs", "length_differs"} <= codes(found)
    assert found.in_plane.fwhm_mm == pytest.approx(6.0, abs=EXACT_MM)


def test_a_cylinder_cut_by_the_lateral_edge_is_flagged():
    found = measure(cylinder()[16:], voxel_mm=VOXEL, details={})
    assert "object_cut" in codes(found)
    assert found.in_plane.fwhm_mm == pytest.approx(6.0, abs=EXACT_MM)


def test_too_coarse_voxels_are_flagged():
    voxel = (6.0, 6.0, 6.0)
    found = measure(cylinder(shape=(24, 24, 12), voxel=voxel, in_plane=7.0), voxel_mm=voxel, details={})
    assert "under_sampled_width" in codes(found)


def test_overshoot_at_the_edge_is_flagged():
    sharp, wide = cylinder(), cylinder(in_plane=12.0)
    assert "edge_overshoot" in codes(measure(sharp + 0.6 * (sharp - wide), voxel_mm=VOXEL, details={}))


def test_long_tails_are_flagged():
    image = 0.85 * cylinder() + 0.15 * cylinder(in_plane=20.0)
    assert "tail_heavy" in codes(measure(image, voxel_mm=VOXEL, details={}))


def test_a_width_that_changes_along_the_bed_is_flagged():
    slices = [cylinder(in_plane=5.0 + k / 8.0, shape=(64, 62, 1)) for k in range(24)]
    assert "width_varies" in codes(measure(np.concatenate(slices, axis=2), voxel_mm=VOXEL, details={}))


def test_an_oval_blur_is_flagged():
    covariance = np.diag([5.0, 7.0]) ** 2 / simulation.FWHM_PER_SIGMA**2
    flat = simulation.disc(
        (64, 62), voxel_mm=VOXEL[:2], centre_mm=(63.3, 60.2), radius_mm=40.0, covariance_mm2=covariance
    )
    found = measure(np.repeat(flat[..., None], 24, axis=2), voxel_mm=VOXEL, details={})
    flag = next(f for f in found.flags if f.code == "in_plane_not_round")
    assert flag.value == pytest.approx(2.0, abs=0.3)  # one Gauss-Newton step towards 5 and 7 mm


def test_cut_off_values_are_flagged():
    image = simulation.add_noise(cylinder(), level=0.05, voxel_mm=VOXEL, rng=np.random.default_rng(5))
    assert "saturated" in codes(measure(np.minimum(image, 0.97), voxel_mm=VOXEL, details={}))


def test_a_small_second_object_is_left_out_and_flagged():
    image = cylinder() + cylinder(radius=6.0, centre=(115.0, 110.0))
    found = measure(image, voxel_mm=VOXEL, details={})
    assert "other_object" in codes(found)
    assert found.in_plane.fwhm_mm == pytest.approx(6.0, abs=EXACT_MM)


def test_too_few_blocks_give_a_width_without_an_error():
    image = cylinder(radius=9.0, shape=(40, 40, 30), centre=(39.3, 38.2))
    image = simulation.add_noise(image, level=0.05, voxel_mm=VOXEL, rng=np.random.default_rng(6))
    found = measure(image, voxel_mm=VOXEL, details={})
    assert found.in_plane.se_mm is None
    assert found.in_plane.df is None
    assert "too_few_blocks" in codes(found)


def _box():
    x, y = np.arange(64) * 2.0, np.arange(62) * 2.0
    return ((abs(x - 62)[:, None, None] < 40) & (abs(y - 60)[None, :, None] < 40)) * np.ones((1, 1, 24))


def _ball():
    return simulation.sphere_sources(
        (50, 50, 34),
        voxel_mm=VOXEL,
        positions_mm=[(49.0, 50.0, 50.0)],
        diameter_mm=60.0,
        in_plane_mm=6.0,
        axial_mm=6.0,
        pieces=17,
    )


WRONG = {
    "two_objects": lambda: cylinder(radius=25, centre=(36.0, 60.0)) + cylinder(radius=18, centre=(100.0, 60.0)),
    "inverted": lambda: 100.0 - 50.0 * cylinder(),
    "all_zero": lambda: np.zeros((40, 40, 20)),
    "not_a_number": lambda: np.where(cylinder() > 0.5, np.nan, 0.0),
    "empty": lambda: np.zeros((40, 40, 0)),
    "white_noise": lambda: np.random.default_rng(0).normal(size=(50, 50, 20)),
    "smooth_noise": lambda: simulation.gaussian_noise(
        (50, 50, 20), fwhm_mm=8.0, voxel_mm=VOXEL, rng=np.random.default_rng(1)
    ),
    "box": _box,
    "ball": _ball,
    "point": lambda: simulation.point_sources(
        (50, 50, 30), voxel_mm=VOXEL, positions_mm=[(50.0, 50.0, 45.0)], in_plane_mm=8.0, axial_mm=8.0
    ),
    "line": lambda: cylinder(radius=1.0),
}


@pytest.mark.parametrize("name", sorted(WRONG))
def test_an_image_of_something_else_is_refused(name):
    with pytest.raises(MeasurementError):
        measure(WRONG[name](), voxel_mm=VOXEL, details={})


def test_arguments_out_of_range_are_named():
    with pytest.raises(ValueError, match="volume"):
        measure(np.zeros((4, 4)), voxel_mm=VOXEL, details={})
    with pytest.raises(ValueError, match="voxel_mm"):
        measure(np.zeros((4, 4, 4)), voxel_mm=(1.0, 0.0, 1.0), details={})


@pytest.mark.parametrize("unit", [1e-9, 1e12])
def test_the_unit_of_the_image_does_not_matter(unit):
    image = simulation.add_noise(cylinder(), level=0.05, voxel_mm=VOXEL, rng=np.random.default_rng(5))
    found = [measure(scale * image, voxel_mm=VOXEL, details={}) for scale in (1.0, unit)]
    # The same fit in other units: the same width and error but for rounding.
    assert found[1].in_plane.fwhm_mm == pytest.approx(found[0].in_plane.fwhm_mm, rel=1e-6)
    assert found[1].in_plane.se_mm == pytest.approx(found[0].in_plane.se_mm, rel=1e-4)
