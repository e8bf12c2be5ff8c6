"""Control charts of widths over phantom sessions."""

import math

import pytest
from test_planning import Builder

from evenblur.audit.tables import number
from evenblur.plan.drift import individuals_limits, limits_from_before

# NIST/SEMATECH e-Handbook of Statistical Methods, 6.3.2.2, flow rates of ten batches and the limits given there.
NIST_FLOW = [49.6, 47.6, 49.9, 51.3, 47.8, 51.2, 52.6, 52.4, 53.6, 52.1]


def test_limits_of_individual_values_are_those_of_the_handbook():
    limits = individuals_limits(NIST_FLOW)
    assert limits.centre_mm == pytest.approx(50.81, abs=1e-9)
    assert limits.high_mm == pytest.approx(55.8041, abs=1e-4)
    assert limits.low_mm == pytest.approx(45.8159, abs=1e-4)


def test_the_factor_is_the_usual_one_and_comes_from_the_mean_range_of_two_normal_values():
    limits = individuals_limits([0.0, 1.0])
    assert limits.high_mm - limits.centre_mm == pytest.approx(2.66, abs=5e-4)
    assert 2 / math.sqrt(math.pi) == pytest.approx(1.128, abs=5e-4)


def test_limits_from_few_sessions_widen_with_their_errors():
    assert limits_from_before([(5.0, 0.2), (5.2, 0.2)], 0.2).high_mm == pytest.approx(
        5.1 + 3 * math.sqrt(0.04 / 2 + 0.04)
    )


def drifting(widths, **setup):
    study = Builder().setup("a-1", **setup)
    for month, width in enumerate(widths, start=1):
        day = f"20{24 + month // 13}-{(month - 1) % 12 + 1:02d}-10"
        study.phantom("a-1", width, 5.0, session=f"p{month}", acquired=day)
    return study.scan("s1", "a-1", acquired="2026-01-05").plan()


def flagged(plan):
    return {p["phantom_session"] for p in plan["periods"] for f in p["flags"] if f["code"] == "width_drifts"}


def test_a_step_beyond_the_errors_is_flagged_and_named_in_the_plan():
    plan = drifting([5.0, 5.1, 4.9, 6.2])
    assert flagged(plan) == {"p4"}
    chart = next(c for c in plan["drift"] if c["direction"] == "in_plane")
    assert [point["beyond"] for point in chart["points"]] == [False, False, False, True]
    assert chart["points"][0]["why"] == "the first session"
    text = next(f["text"] for p in plan["periods"] for f in p["flags"] if f["code"] == "width_drifts")
    assert "a-1 in session p4 is 6.20 mm" in text


def test_a_step_within_the_errors_is_not():
    # Two sessions with 0.21 mm each: three errors of the difference are 0.87 mm.
    assert flagged(drifting([5.0, 5.8])) == set()
    assert flagged(drifting([5.0, 5.9])) == {"p2"}


def test_a_step_at_a_recorded_change_is_no_drift():
    plan = drifting([5.0, 5.1, 7.0, 7.1], changed="2024-02-20")
    assert flagged(plan) == set()
    assert plan["drift"][0]["points"][2]["why"] == "the first after a change of the setup"


def test_many_sessions_set_their_own_limits():
    # Ten quiet sessions scatter far less than the repeatability allows for: a step of 0.3 mm stands out.
    quiet = [5.0, 5.02, 4.98, 5.01, 5.0, 4.99, 5.02, 5.0, 5.01, 4.99]
    assert flagged(drifting([*quiet, 5.3])) == {"p11"}
    limits = individuals_limits([*quiet, 5.3])
    point = drifting([*quiet, 5.3])["drift"][0]["points"][0]
    assert (number(point["low_mm"]), number(point["high_mm"])) == (number(limits.low_mm), number(limits.high_mm))


def test_one_session_gives_no_chart():
    assert drifting([5.0])["drift"] == []
