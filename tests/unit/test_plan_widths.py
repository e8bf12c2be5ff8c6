"""One width a period and direction, and the target from them: numbers worked by hand."""

import math

import pytest

from evenblur.plan.combining import PeriodWidth, average, period_width
from evenblur.plan.targets import Candidate, decide_target, round_up
from evenblur.study.settings import TargetPart
from evenblur.widths import missing_width

PREFER = ("reference_image", "uniform_cylinder", "hot_spheres", "line_source", "point_source")


def record(kind, in_plane=None, axial=None, label="p"):
    def width(pair):
        return None if pair is None else {"fwhm_mm": pair[0], "se_mm": pair[1], "df": 20.0}

    return {"phantom": label, "kind": kind, "in_plane": width(in_plane), "axial": width(axial), "flags": []}


def in_plane(records, **more):
    return period_width("in_plane", records=records, prefer=PREFER, repeatability_mm=0.2, **more)


def test_repeatability_is_added_in_quadrature():
    width = in_plane([record("uniform_cylinder", (6.0, 0.15))])
    assert (width.fwhm_mm, width.statistical_se_mm, width.se_mm) == (6.0, 0.15, 0.25)


def test_without_a_statistical_error_repeatability_stands_alone_and_is_flagged():
    width = in_plane([record("uniform_cylinder", (6.0, None))])
    assert (width.statistical_se_mm, width.se_mm) == (None, 0.2)
    assert [flag["code"] for flag in width.flags] == ["no_statistical_error"]


def test_the_first_preferred_kind_gives_the_width_and_others_are_listed():
    width = in_plane([record("point_source", (5.0, 0.1)), record("uniform_cylinder", (6.0, 0.1))])
    assert (width.fwhm_mm, width.source) == (6.0, "uniform_cylinder")
    assert width.other_kinds[0]["difference_mm"] == -1.0
    assert width.other_kinds[0]["combined_se_mm"] == pytest.approx(math.hypot(0.1, 0.1), abs=1e-4)
    assert "kinds_disagree" in [flag["code"] for flag in width.flags]


def test_kinds_within_three_errors_are_not_flagged():
    width = in_plane([record("point_source", (5.6, 0.1)), record("uniform_cylinder", (6.0, 0.1))])
    assert width.flags == ()


def test_a_direction_is_taken_from_the_kind_that_measured_it():
    records = [record("line_source", in_plane=(5.0, 0.1)), record("point_source", (5.1, 0.1), (7.0, 0.1))]
    axial = period_width("axial", records=records, prefer=PREFER, repeatability_mm=0.2)
    assert (in_plane(records).source, axial.source) == ("line_source", "point_source")


def test_the_error_of_an_average_is_the_larger_of_combined_and_scatter():
    assert average([(5.0, 0.3), (5.2, 0.4)]) == (5.1, 0.25)  # hypot(0.3, 0.4) / 2 against 0.1414 / sqrt 2 = 0.1
    assert average([(5.0, 0.01), (6.0, 0.01)]) == (5.5, 0.5)  # 0.7071 / sqrt 2 against 0.007
    assert average([(5.0, None), (5.2, 0.1)]) == (5.1, None)


def test_a_declared_width_fills_in_and_is_flagged():
    width = in_plane([], declared_mm=7.0, declared_se_mm=1.0)
    assert (width.source, width.fwhm_mm, width.statistical_se_mm) == ("declared", 7.0, None)
    assert width.se_mm == pytest.approx(math.sqrt(1.04), abs=1e-4)
    assert in_plane([]) is None


@pytest.mark.parametrize(
    ("measured", "target", "expected"),
    # Pythagorean triples, and two square roots worked out by hand.
    [(3, 5, 4.0), (6, 10, 8.0), (5, 8, math.sqrt(39)), (6.5, 7, math.sqrt(6.75)), (8, 8, 0.0), (9, 8, 0.0)],
)
def test_widths_add_in_quadrature(measured, target, expected):
    assert missing_width(measured, target) == pytest.approx(expected, rel=1e-12)


def test_rounding_up_never_lifts_a_width_that_stands_on_the_step():
    assert [round_up(value, 0.1) for value in (8.0, 8.0001, 8.1, 8.09999)] == [8.0, 8.1, 8.1, 8.1]
    assert round_up(7.3, 0.25) == 7.5


def width(fwhm, se, source="uniform_cylinder"):
    return PeriodWidth(fwhm, se, se, source)


def candidate(name, in_plane, axial):
    return Candidate(name, {"in_plane": width(*in_plane), "axial": width(*axial)})


PERIODS = [candidate("a.p1", (6.0, 0.2), (5.0, 0.2)), candidate("b.p1", (5.9, 0.5), (7.05, 0.21))]


def test_the_coarsest_period_with_its_allowance_sets_each_direction():
    target = decide_target(TargetPart(isotropic=False), PERIODS)
    # in-plane: 6.0 + 2 x 0.2 = 6.4 against 5.9 + 2 x 0.5 = 6.9; axial: 7.05 + 0.42 = 7.47, rounded up.
    assert (target.in_plane_mm, target.axial_mm) == (6.9, 7.5)
    assert "b.p1 in-plane" in target.decided_by


def test_an_isotropic_target_takes_the_larger_direction():
    target = decide_target(TargetPart(), PERIODS)
    assert (target.in_plane_mm, target.axial_mm) == (7.5, 7.5)


def test_a_declared_width_sets_the_target_only_where_the_study_says_so():
    periods = [PERIODS[0], candidate("c.declared", (9.0, 1.0, "declared"), (9.0, 1.0, "declared"))]
    assert decide_target(TargetPart(), periods).in_plane_mm == 6.4
    assert decide_target(TargetPart(declared_counts=True), periods).in_plane_mm == 11.0


def test_without_a_width_that_counts_there_is_no_target():
    assert decide_target(TargetPart(), []).in_plane_mm is None


def test_a_fixed_target_carries_its_approval():
    fixed = TargetPart.model_validate(
        {
            "choose": "fixed",
            "in_plane_mm": 8,
            "axial_mm": 8.0,
            "approval": {"by": "the invented board", "on": "2026-03-01", "reason": "agreed"},
        }
    )
    target = decide_target(fixed, PERIODS)
    assert (target.in_plane_mm, target.decided_by, target.on) == (8.0, "the invented board", "2026-03-01")
