"""Verdicts of the audit: the formula of the resulting error, each rule, and which rule wins."""

from itertools import combinations
from math import sqrt

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from evenblur.audit.verdicts import PRECEDENCE, DirectionFacts, direction_verdict, period_verdict, resulting_se

TOLERANCE_MM = 0.3

# One direction for every verdict, as README.md words it (target 7 mm, tolerance 0.3 mm).
EXAMPLES = {
    "pass": DirectionFacts(5.0, 0.1, 7.0, 7.1, "uniform_cylinder"),
    "unproven": DirectionFacts(5.0, None, 7.0, 7.1, "uniform_cylinder"),
    "declared": DirectionFacts(5.0, None, 7.0, None, "declared"),
    "fail": DirectionFacts(5.0, 0.1, 7.0, 7.4, "uniform_cylinder"),
    "coarser": DirectionFacts(7.5, 0.1, 7.0, None, "uniform_cylinder"),
    "unmeasured": DirectionFacts(None, None, 7.0, None, None),
}


def verdict(facts):
    return direction_verdict(facts, tolerance_mm=TOLERANCE_MM)


def test_every_word_has_an_example_and_a_rank():
    assert set(EXAMPLES) == set(PRECEDENCE)
    assert len(PRECEDENCE) == len(set(PRECEDENCE))


@pytest.mark.parametrize("word", EXAMPLES)
def test_each_rule_gives_its_verdict(word):
    assert verdict(EXAMPLES[word]) == word


@given(st.floats(1.0, 8.0), st.floats(0.01, 0.5), st.floats(0.1, 6.0))
@settings(derandomize=True, deadline=None)
def test_resulting_error_is_the_slope_of_quadrature(measured_mm, se_mm, kernel_mm):
    target_mm = sqrt(measured_mm**2 + kernel_mm**2)
    step = 1e-5
    above, below = (sqrt((measured_mm + sign * step) ** 2 + kernel_mm**2) for sign in (1, -1))
    slope = (above - below) / (2 * step)
    found = resulting_se(measured_mm=measured_mm, se_mm=se_mm, target_mm=target_mm)
    # Central difference: its own error is of the order of step² (1e-10) plus rounding / step (1e-11), times the se.
    assert found == pytest.approx(slope * se_mm, abs=1e-8)


def test_resulting_error_needs_all_three():
    whole = {"measured_mm": 5.0, "se_mm": 0.1, "target_mm": 7.0}
    for name in whole:
        assert resulting_se(**{**whole, name: None}) is None


def test_a_target_of_zero_is_refused():
    with pytest.raises(ValueError, match="positive"):
        resulting_se(measured_mm=5.0, se_mm=0.1, target_mm=0.0)


def test_the_tolerance_itself_still_passes():
    # 7.0 + 0.3 and 7.3 - 7.0 differ in binary; records have four decimals.
    assert verdict(DirectionFacts(5.0, 0.1, 7.0, 7.3, "point_source")) == "pass"
    assert verdict(DirectionFacts(5.0, 0.1, 7.0, 6.7, "point_source")) == "pass"
    assert verdict(DirectionFacts(5.0, 0.1, 7.0, 7.3001, "point_source")) == "fail"
    assert verdict(DirectionFacts(5.0, 0.1, 7.0, 6.6999, "point_source")) == "fail"


def test_unproven_starts_above_half_the_tolerance():
    # measured / target is 0.5, so a statistical error of 0.3 mm results in 0.15 mm: half of 0.3 mm.
    assert verdict(DirectionFacts(3.5, 0.3, 7.0, 7.0, "point_source")) == "pass"
    assert verdict(DirectionFacts(3.5, 0.3001, 7.0, 7.0, "point_source")) == "unproven"


def test_coarser_starts_above_the_tolerance():
    assert verdict(DirectionFacts(7.3, 0.1, 7.0, 7.3, "point_source")) == "pass"
    assert verdict(DirectionFacts(7.3001, 0.1, 7.0, 7.3001, "point_source")) == "coarser"


def test_a_measured_direction_without_achieved_width_is_unproven():
    assert verdict(DirectionFacts(5.0, 0.1, 7.0, None, "point_source")) == "unproven"


def test_a_declared_direction_never_fails():
    assert verdict(DirectionFacts(5.0, None, 7.0, 9.0, "declared")) == "declared"


def test_a_declared_direction_can_be_coarser():
    assert verdict(DirectionFacts(8.0, None, 7.0, None, "declared")) == "coarser"


def test_without_a_target_nothing_is_proven():
    assert verdict(DirectionFacts(5.0, 0.1, None, 5.0, "point_source")) == "unproven"


@pytest.mark.parametrize(
    ("worse", "better"), list(combinations(("unmeasured", "coarser", "fail", "declared", "unproven", "pass"), 2))
)
def test_the_worse_direction_decides_whichever_it_is(worse, better):
    for pair in ((worse, better), (better, worse)):
        directions = [EXAMPLES[word] for word in pair]
        assert period_verdict(directions, status="smooth", tolerance_mm=TOLERANCE_MM) == worse


@pytest.mark.parametrize("status", ["coarser", "unmeasured"])
def test_the_plan_can_leave_a_period_out(status):
    fine = EXAMPLES["pass"]
    assert period_verdict([fine, fine], status=status, tolerance_mm=TOLERANCE_MM) == status


def test_a_period_at_target_is_judged_like_any_other():
    fine = DirectionFacts(6.95, 0.1, 7.0, 6.95, "point_source")
    assert period_verdict([fine, fine], status="at_target", tolerance_mm=TOLERANCE_MM) == "pass"
