"""Line sources against lines cut into blurred points, and what wrong images lead to."""

import numpy as np
import pytest

import line_simulation
import simulation
from benchmarks import line_statistics, width_statistics
from evenblur.phantoms.base import MeasurementError
from evenblur.phantoms.line_model import disc_nodes
from evenblur.phantoms.line_source import measure
from line_simulation import Capillary, slope_of

VOXEL = (2.0, 2.0, 3.0)
SHAPE = (48, 44, 36)
MIDDLE = 52.0
EXACT_MM = 0.05  # the promise for noise-free images


def codes(found):
    return {flag.code for flag in found.flags}


def image_of(*capillaries, in_plane=5.0, axial=6.5, shape=SHAPE, voxel=VOXEL, diameter=0.0):
    return line_simulation.lines(
        shape,
        voxel_mm=voxel,
        capillaries=list(capillaries) or [one()],
        in_plane_mm=in_plane,
        axial_mm=axial,
        diameter_mm=diameter,
    )


def one(tilt_deg=2.0, **more):
    return Capillary((47.3, 42.1), MIDDLE, slope_of(tilt_deg), **more)


def three(**more):
    return [
        Capillary((26.3, 28.1), MIDDLE, slope_of(1.0), **more),
        Capillary((67.9, 31.2), MIDDLE, slope_of(2.0, 120.0), **more),
        Capillary((44.4, 62.3), MIDDLE, slope_of(3.0, 250.0), **more),
    ]


def noisy(image, level, seed=3):
    return simulation.add_noise(image, level=level, voxel_mm=VOXEL, rng=np.random.default_rng(seed))


@pytest.mark.parametrize(("in_plane", "axial"), [(3.0, 4.5), (5.0, 7.5), (8.0, 5.0), (12.0, 16.0), (15.0, 11.0)])
@pytest.mark.parametrize("tilt", [0.0, 3.0, 10.0, 15.0])
def test_noise_free_width_comes_out_within_a_twentieth_of_a_millimetre(in_plane, axial, tilt):
    found = measure(3.0 + 7.0 * image_of(one(tilt), in_plane=in_plane, axial=axial), voxel_mm=VOXEL, details={})
    assert found.in_plane.fwhm_mm == pytest.approx(in_plane, abs=EXACT_MM)
    assert found.axial is None
    assert found.flags == ()
    # The direction is lost in a straight line; the tilt itself follows from the definition.
    assert found.fit["lines"][0]["tilt_deg"] == pytest.approx(tilt, abs=0.02)


def test_several_lines_share_one_width_and_are_found_where_they_are():
    lines = three()
    found = measure(image_of(*lines), voxel_mm=VOXEL, details={})
    assert found.in_plane.fwhm_mm == pytest.approx(5.0, abs=EXACT_MM)
    centres = sorted(tuple(line["centre_mm"][:2]) for line in found.fit["lines"])
    middle = (SHAPE[2] - 1) / 2 * VOXEL[2]
    expected = sorted(
        tuple(p + s * (middle - MIDDLE) for p, s in zip(line.place_mm, line.slope, strict=True)) for line in lines
    )
    np.testing.assert_allclose(centres, expected, atol=0.002)  # the record keeps three decimals


def test_width_by_radius_counts_from_the_middle_of_the_image():
    found = measure(image_of(*three()), voxel_mm=VOXEL, details={})
    rows = found.fit["width_by_radius"]
    middle = [(n - 1) / 2 * step for n, step in zip(SHAPE[:2], VOXEL[:2], strict=True)]
    centres = [line["centre_mm"] for line in found.fit["lines"]]
    expected = sorted(np.hypot(x - middle[0], y - middle[1]) for x, y, _ in centres)
    np.testing.assert_allclose([row["radius_mm"] for row in rows], expected, atol=0.01)
    np.testing.assert_allclose([row["in_plane_mm"] for row in rows], 5.0, atol=EXACT_MM)


def test_a_line_says_nothing_of_the_axial_width_and_makes_no_noise_about_it():
    straight = measure(image_of(one(0.0)), voxel_mm=VOXEL, details={})
    assert straight.axial is None
    assert not any("axial" in flag.text for flag in straight.flags)
    assert straight.fit["axial_nuisance"]["effect_on_width_mm"] == 0.0


def test_the_unknown_axial_width_is_part_of_the_error_of_a_tilted_noisy_line():
    errors = [
        measure(noisy(image_of(one(tilt), shape=(48, 44, 16)), 0.05), voxel_mm=VOXEL, details={}).fit["axial_nuisance"]
        for tilt in (1.0, 8.0)
    ]
    # Its influence goes with tan² of the tilt; at 8 degrees the image begins to tell it, so less than 64 times.
    assert errors[0]["effect_on_width_mm"] < 0.01
    assert errors[1]["effect_on_width_mm"] > 5.0 * errors[0]["effect_on_width_mm"]


def test_activity_that_changes_along_the_line_does_not_change_the_width():
    found = measure(image_of(one(5.0, gradient_per_mm=0.01)), voxel_mm=VOXEL, details={})
    assert found.in_plane.fwhm_mm == pytest.approx(5.0, abs=EXACT_MM)
    # 1 % a mm about 1 over the whole field: standard deviation of an even spread, 0.01 * 36 * 3 / sqrt(12).
    assert found.fit["lines"][0]["activity_variation"] == pytest.approx(0.01 * 36 * 3.0 / np.sqrt(12.0), rel=0.05)


def test_slices_near_an_end_inside_the_field_are_left_out():
    line = one(8.0, ends_mm=(15.0, 90.0))
    found = measure(image_of(line, in_plane=6.0), voxel_mm=VOXEL, details={})
    assert found.in_plane.fwhm_mm == pytest.approx(6.0, abs=EXACT_MM)
    assert found.fit["lines"][0]["ends_seen"] == 2
    assert 75.0 - 6.0 * 6.0 < found.fit["lines"][0]["length_mm"] < 75.0 - 2.0 * 6.0  # one to three widths each


@pytest.mark.parametrize("unit", [1e-9, 1e9])
def test_the_image_s_unit_does_not_matter(unit):
    found = measure(unit * (0.5 + image_of(*three())), voxel_mm=VOXEL, details={})
    assert found.in_plane.fwhm_mm == pytest.approx(5.0, abs=EXACT_MM)
    for line in found.fit["lines"]:
        assert line["background"] == pytest.approx(0.5 * unit, rel=1e-3)
        assert line["peak"] == pytest.approx(unit, rel=0.05)  # a tilt by 3 degrees lowers it a little


def test_a_sagging_line_keeps_its_width():
    found = measure(image_of(one(2.0, sag_mm=2.5)), voxel_mm=VOXEL, details={})
    assert found.in_plane.fwhm_mm == pytest.approx(5.0, abs=EXACT_MM)
    assert found.fit["lines"][0]["bend_mm"] == pytest.approx(2.5, abs=0.1)


@pytest.mark.parametrize("tilt", [0.0, 10.0])
def test_the_thickness_of_the_capillary_is_not_charged_to_the_scanner(tilt):
    image = image_of(one(tilt), shape=(40, 40, 20), diameter=3.0)
    found = measure(image, voxel_mm=VOXEL, details={"source_diameter_mm": 3.0})
    assert found.in_plane.fwhm_mm == pytest.approx(5.0, abs=EXACT_MM)
    # Taken as thin, the disc's variance d² / 16 an axis adds to the blur's, in the Gaussian that fits best.
    thin = measure(image, voxel_mm=VOXEL, details={})
    expected = np.sqrt(5.0**2 + 9.0 / 16.0 * 8.0 * np.log(2.0))
    assert thin.in_plane.fwhm_mm == pytest.approx(expected, rel=0.01)


def test_disc_nodes_have_the_moments_of_a_disc():
    nodes, weights = disc_nodes(6.0)
    assert weights.sum() == pytest.approx(1.0, abs=1e-12)
    # A disc of radius R: mean x² = R² / 4, mean x⁴ = R⁴ / 8, mean x² y² = R⁴ / 24.
    assert weights @ nodes[:, 0] ** 2 == pytest.approx(9 / 4, abs=1e-12)
    assert weights @ nodes[:, 1] ** 4 == pytest.approx(81 / 8, abs=1e-11)
    assert weights @ (nodes[:, 0] ** 2 * nodes[:, 1] ** 2) == pytest.approx(81 / 24, abs=1e-11)


@pytest.mark.parametrize("case", ["tilted", "short_line"])
def test_twenty_noisy_images_scatter_no_more_than_promised_and_as_their_errors_say(case):
    (row,) = width_statistics.run(line_statistics.CASES[case](), noise=0.01, runs=20)
    assert row.scatter < 0.1  # the promise at 1 % of the peak
    assert abs(row.bias) < 4.0 * row.scatter / np.sqrt(20)  # four standard errors of a mean of 20
    assert 0.5 < row.ratio < 2.0  # the scatter of 20 is known to 16 % only
    assert row.coverage >= 0.75  # binomial with p = 0.95: fewer than 15 of 20 happen once in 3000


def test_a_line_that_fills_the_image_has_no_standard_error_in_correlated_noise():
    image = noisy(image_of(Capillary((15.3, 16.1)), shape=(16, 17, 8)), 0.02)
    found = measure(image, voxel_mm=VOXEL, details={})
    assert found.in_plane.se_mm is None
    assert "too_few_blocks" in codes(found)


def test_long_tails_are_flagged_and_told_as_a_ratio():
    found = measure(0.8 * image_of(in_plane=6.0) + 0.2 * image_of(in_plane=14.0), voxel_mm=VOXEL, details={})
    assert "tail_heavy" in codes(found)
    assert found.fit["tenth_to_half"] > 1.9
    plain = measure(image_of(in_plane=6.0), voxel_mm=VOXEL, details={})
    assert plain.fit["tenth_to_half"] == pytest.approx(np.sqrt(np.log2(10.0)), abs=0.002)  # of a Gaussian


def test_a_thick_capillary_taken_as_thin_is_flagged():
    image = simulation.straight_cylinder(
        SHAPE, voxel_mm=VOXEL, centre_mm=(47.0, 43.0), radius_mm=3.0, ends_mm=(-1e6, 1e6), in_plane_mm=5.0, axial_mm=5.0
    )
    assert "not_gaussian" in codes(measure(image, voxel_mm=VOXEL, details={}))
    right = measure(image, voxel_mm=VOXEL, details={"source_diameter_mm": 6.0})
    assert right.flags == ()
    assert right.in_plane.fwhm_mm == pytest.approx(5.0, abs=EXACT_MM)


def test_different_widths_along_x_and_y_are_flagged():
    x, y = (np.arange(n) * s for n, s in zip(SHAPE[:2], VOXEL[:2], strict=True))
    flat = np.outer(
        np.exp(-4.0 * np.log(2.0) * ((x - 47.3) / 6.0) ** 2), np.exp(-4.0 * np.log(2.0) * ((y - 42.1) / 7.0) ** 2)
    )
    found = measure(np.repeat(flat[..., None], SHAPE[2], axis=2), voxel_mm=VOXEL, details={})
    flag = next(f for f in found.flags if f.code == "in_plane_not_round")
    assert flag.value == pytest.approx(-1.0, abs=0.1)  # one Gauss-Newton step towards 6 and 7 mm
    assert found.fit["x_to_y"] == pytest.approx(6.0 / 7.0, abs=0.02)


def test_lines_of_different_widths_are_flagged_and_listed():
    first, second, _ = three()
    found = measure(image_of(first, in_plane=5.0) + image_of(second, in_plane=6.5), voxel_mm=VOXEL, details={})
    assert "width_varies" in codes(found)
    assert sorted(line["in_plane_mm"] for line in found.fit["lines"]) == pytest.approx([5.0, 6.5], abs=EXACT_MM)


def test_two_halves_of_a_noisy_image_agree_within_their_errors():
    halves = measure(noisy(image_of(*three()), 0.02), voxel_mm=VOXEL, details={}).fit["halves"]["in_plane"]
    assert abs(halves["difference_mm"]) < 4.0 * halves["se_mm"]
    assert halves["se_mm"] > 0.0


def test_a_line_at_the_edge_of_the_image_is_flagged():
    found = measure(image_of(one(0.0), in_plane=8.0)[21:], voxel_mm=VOXEL, details={})
    assert "object_cut" in codes(found)


def test_cut_off_values_are_flagged_or_refused():
    image = noisy(image_of(in_plane=8.0), 0.01)
    assert "saturated" in codes(measure(np.minimum(image, 0.9), voxel_mm=VOXEL, details={}))
    with pytest.raises(MeasurementError, match="flat tops"):
        measure(np.minimum(image, 0.5), voxel_mm=VOXEL, details={})


def test_too_coarse_voxels_are_flagged():
    assert "under_sampled_width" in codes(measure(image_of(in_plane=2.6), voxel_mm=VOXEL, details={}))


def test_a_steep_line_is_flagged():
    found = measure(image_of(one(18.0)), voxel_mm=VOXEL, details={})
    assert "tilt_large" in codes(found)


def test_something_else_in_the_image_is_flagged_and_does_not_change_the_width():
    other = simulation.point_sources(
        SHAPE, voxel_mm=VOXEL, positions_mm=[(80.0, 20.0, 40.0)], in_plane_mm=5.0, axial_mm=6.5, peak=2.0
    )
    found = measure(image_of() + other, voxel_mm=VOXEL, details={})
    assert "other_object" in codes(found)
    assert found.in_plane.fwhm_mm == pytest.approx(5.0, abs=EXACT_MM)


def test_profile_for_the_figure_has_lists_of_one_length_and_starts_near_one():
    profile = measure(image_of(), voxel_mm=VOXEL, details={}).fit["profile"]
    lengths = {len(profile[key]) for key in ("position_mm", "measured", "fitted")}
    assert len(lengths) == 1
    assert 3 < lengths.pop() <= 200
    assert profile["measured"][0] == pytest.approx(1.0, abs=0.05)  # the innermost ring is a tenth of a width out


def _cylinder(radius, ends=(-1e6, 1e6)):
    return simulation.straight_cylinder(
        SHAPE, voxel_mm=VOXEL, centre_mm=(47.0, 43.0), radius_mm=radius, ends_mm=ends, in_plane_mm=6.0, axial_mm=6.0
    )


def _points(in_plane, axial):
    places = [(30.3, 30.1, 50.2), (62.0, 50.0, 48.0)]
    return simulation.point_sources(SHAPE, voxel_mm=VOXEL, positions_mm=places, in_plane_mm=in_plane, axial_mm=axial)


WRONG = {
    "wide_cylinder": lambda: _cylinder(36.0),
    "cylinder": lambda: _cylinder(22.0),
    "noisy_cylinder": lambda: noisy(_cylinder(22.0), 0.05),
    "thin_cylinder": lambda: _cylinder(9.0),
    "noisy_thin_cylinder": lambda: noisy(_cylinder(9.0), 0.03),
    "rod": lambda: _cylinder(6.0),
    "cylinder_with_ends": lambda: _cylinder(12.0, (25.0, 85.0)),
    "points": lambda: _points(5.0, 6.0),
    "points_wide_along_the_bed": lambda: _points(4.0, 12.0),
    "line_across_the_bed": lambda: np.ascontiguousarray(np.moveaxis(image_of(shape=(48, 44, 48)), 2, 0)),
    "two_lines_in_one": lambda: image_of(Capillary((44.0, 43.0)), Capillary((49.5, 43.0))),
    "sheet": lambda: np.repeat(image_of()[:, 20:21], SHAPE[1], axis=1),
    "inverted": lambda: 5.0 - image_of(),
    "all_zero": lambda: np.zeros(SHAPE),
    "not_a_number": lambda: np.where(image_of() > 0.9, np.nan, image_of()),
    "empty": lambda: np.zeros((40, 0, 20)),
    "two_slices": lambda: image_of()[..., :2],
    "white_noise": lambda: np.random.default_rng(0).normal(size=SHAPE),
    "correlated_noise": lambda: noisy(np.zeros(SHAPE), 1.0),
}


@pytest.mark.parametrize("name", sorted(WRONG))
def test_an_image_of_something_else_is_refused(name):
    with pytest.raises(MeasurementError):
        measure(WRONG[name](), voxel_mm=VOXEL, details={})


def test_a_diameter_out_of_range_is_named():
    with pytest.raises(ValueError, match="source_diameter_mm"):
        measure(image_of(), voxel_mm=VOXEL, details={"source_diameter_mm": -1.0})
