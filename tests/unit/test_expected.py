"""What a width does to spheres and to detail, against distributions of scipy, convolutions and closed forms."""

from math import erf, log, pi, sqrt

import numpy as np
import pytest
from scipy import ndimage, stats

from audit_example import example_audit
from evenblur.audit.costs import mean_width, recovery_cost
from evenblur.audit.curves import half_transfer, shown_profiles, time_pair, transfer_of, transfer_pair
from evenblur.audit.expected import (
    SPHERES_MM,
    centre_recovery,
    edge_transfer,
    gaussian_transfer,
    mean_recovery,
    radial_transfer,
)
from evenblur.audit.facts import audit_record

SIGMAS_A_WIDTH = 2 * sqrt(2 * log(2))
FREQUENCIES = np.linspace(0.0, 0.12, 13)


@pytest.mark.parametrize("fwhm_mm", [4.0, 8.0, 12.5])
@pytest.mark.parametrize("diameter_mm", [5.0, 10.0, 37.0])
def test_a_spheres_centre_recovers_the_share_of_a_maxwell_distribution_within_its_radius(diameter_mm, fwhm_mm):
    sigma = fwhm_mm / SIGMAS_A_WIDTH
    wanted = stats.maxwell.cdf(diameter_mm / 2, scale=sigma)
    assert centre_recovery(diameter_mm, fwhm_mm=fwhm_mm) == pytest.approx(wanted, rel=1e-9)


@pytest.mark.parametrize(("diameter_mm", "fwhm_mm"), [(10.0, 8.0), (17.0, 8.0), (28.0, 6.0)])
def test_mean_and_centre_agree_with_a_ball_of_voxels_that_is_convolved(diameter_mm, fwhm_mm):
    step = 0.5
    axis = np.arange(-40, 41) * step
    squared = axis[:, None, None] ** 2 + axis[:, None] ** 2 + axis**2
    # Each voxel holds the share of it that lies in the ball, from a straight edge one voxel wide.
    ball = np.clip((diameter_mm / 2 - np.sqrt(squared)) / step + 0.5, 0.0, 1.0)
    blurred = ndimage.gaussian_filter(ball, fwhm_mm / SIGMAS_A_WIDTH / step, mode="constant", truncate=6)
    # The edge of half-millimetre voxels costs some 0.3 % of the ball's volume.
    assert centre_recovery(diameter_mm, fwhm_mm=fwhm_mm) == pytest.approx(blurred[40, 40, 40], abs=0.004)
    mean = np.sum(blurred * ball) / np.sum(ball)
    assert mean_recovery(diameter_mm, fwhm_mm=fwhm_mm) == pytest.approx(mean, abs=0.004)


def test_recovery_rises_with_size_and_falls_with_width():
    for reading in (centre_recovery, mean_recovery):
        values = [reading(size, fwhm_mm=8.0) for size in SPHERES_MM]
        assert values == sorted(values)
        assert 0 < values[0] < values[-1] <= 1
        assert reading(10.0, fwhm_mm=9.0) < reading(10.0, fwhm_mm=8.0)
        with pytest.raises(ValueError, match="must be positive"):
            reading(0.0, fwhm_mm=8.0)


def test_a_gaussians_transfer_falls_to_a_half_where_its_closed_form_says():
    for fwhm_mm in (4.0, 8.0):
        half = 2 * log(2) / (pi * fwhm_mm)
        assert gaussian_transfer(np.array([half]), fwhm_mm=fwhm_mm)[0] == pytest.approx(0.5, abs=1e-12)


@pytest.mark.parametrize("fwhm_mm", [5.0, 8.0])
@pytest.mark.parametrize("rising", [1, -1])
def test_an_edge_of_a_gaussian_blur_shows_the_gaussians_transfer(fwhm_mm, rising):
    positions = np.arange(-25.0, 25.1, 0.8)
    values = [7.0 + rising * 3.0 * erf(x / (fwhm_mm / SIGMAS_A_WIDTH * sqrt(2))) for x in positions]
    found = edge_transfer(positions, values, frequency_per_mm=FREQUENCIES)
    np.testing.assert_allclose(found, gaussian_transfer(FREQUENCIES, fwhm_mm=fwhm_mm), atol=2e-3)


@pytest.mark.parametrize("fwhm_mm", [5.0, 8.0])
def test_a_point_of_a_gaussian_blur_shows_the_gaussians_transfer(fwhm_mm):
    radii = np.arange(0.2, 3 * fwhm_mm, 0.4)
    values = 900.0 * np.exp(-4 * log(2) * (radii / fwhm_mm) ** 2)
    found = radial_transfer(radii, values, frequency_per_mm=FREQUENCIES)
    np.testing.assert_allclose(found, gaussian_transfer(FREQUENCIES, fwhm_mm=fwhm_mm), atol=5e-3)


def test_profiles_that_tell_no_transfer_are_refused():
    with pytest.raises(ValueError, match="two levels"):
        edge_transfer([0.0, 1.0, 2.0], [3.0, 4.0, 3.0], frequency_per_mm=FREQUENCIES)
    with pytest.raises(ValueError, match="three points"):
        radial_transfer([0.0, 1.0], [1.0, 0.0], frequency_per_mm=FREQUENCIES)
    with pytest.raises(ValueError, match="nothing lies under"):
        radial_transfer([0.0, 1.0, 2.0], [0.0, 0.0, 0.0], frequency_per_mm=FREQUENCIES)
    flat = {"position_mm": [0.0, 1.0, 2.0], "measured": [1.0, 1.0, 1.0], "fitted": [1.0, 1.0, 1.0]}
    assert transfer_of(flat, kind="uniform_cylinder") is None
    assert transfer_of(flat, kind="hot_spheres") is None  # a curved edge: no plain transform gives its transfer
    assert transfer_of(None, kind="point_source") is None


def test_the_figure_names_the_frequency_that_passes_half():
    values = gaussian_transfer(np.linspace(0.0, 0.14, 57), fwhm_mm=8.0).tolist()
    assert half_transfer(values) == pytest.approx(2 * log(2) / (pi * 8.0), abs=2e-4)  # straight between points
    assert half_transfer([1.0] * 57) is None
    audit = example_audit()
    record = audit_record(audit)
    pair = transfer_pair(shown_profiles(record, audit), record)
    # The example's cylinders A and D are edges of 5.2 and 6.0 mm before, of 7 mm after; ripples move them a little.
    assert "half is passed on at 0.0" in pair.message
    after = float(pair.message.split("After it:")[1].split()[5])
    assert after == pytest.approx(2 * log(2) / (pi * 7.0), rel=0.05)


def test_the_cost_shows_the_finest_period_the_coarsest_and_the_target():
    cost = recovery_cost(audit_record(example_audit()))
    assert cost.columns[-1] == "all, at the target (7.00 mm)"
    finest = (4.1**2 * 4.4) ** (1 / 3)  # period C, the finest in use
    assert cost.columns[0] == f"C · s1, as it came ({finest:.2f} mm)"
    row = next(row for row in cost.rows if row.diameter_mm == 10.0)
    assert row.readings[-1][0] == pytest.approx(stats.maxwell.cdf(5.0, scale=7.0 / SIGMAS_A_WIDTH), rel=1e-9)
    assert mean_width(4.1, 4.4) == pytest.approx(finest, abs=1e-6)


def test_sessions_of_one_setup_are_joined_in_time():
    record = audit_record(example_audit())
    later = record.periods[0].model_copy(update={"phantom_session": "s2", "acquired": "2025-09-01"})
    pair = time_pair(record.model_copy(update={"periods": [*record.periods, later]}))
    series = {one.name: one for one in pair.charts[0].series}
    (first, width), (second, _) = series["A"].points
    assert (second - first, width) == (184, 5.2)  # from 1 March to 1 September
    assert len(series["B"].points) == 1
    ticks = [words for _, words in pair.charts[0].x_ticks]
    assert 1 <= len(ticks) <= 6
    assert "E" not in series or not series["E"].points  # declared, not measured
