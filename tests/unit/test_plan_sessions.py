"""Which phantom session speaks for a scan, by dates counted by hand."""

import datetime

import pytest

from evenblur.plan.sessions import choose_session, group_sessions
from evenblur.study.rows import PhantomRow, SetupRow


def day(text):
    return datetime.date.fromisoformat(text)


def phantom(session, acquired, **more):
    return PhantomRow.model_validate(
        {
            "phantom": f"{session}-{acquired}",
            "setup": "quay-1",
            "phantom_session": session,
            "acquired": acquired,
            "kind": "uniform_cylinder",
            "image": "p.nii",
            **more,
        }
    )


def setup(changed=""):
    return SetupRow.model_validate({"setup": "quay-1", "site": "quay", **({"changed": changed} if changed else {})})


def chosen(scan_day, phantoms, *, changed="", rule="latest_before", valid_days=365):
    sessions = group_sessions(phantoms).get("quay-1", [])
    choice = choose_session(day(scan_day), setup=setup(changed), sessions=sessions, rule=rule, valid_days=valid_days)
    return choice.session.label if choice.session else choice.reason


TWO = [phantom("p1", "2026-01-10"), phantom("p2", "2026-06-10")]


@pytest.mark.parametrize(
    ("scan_day", "expected"),
    [
        ("2026-01-09", "no_phantom_session"),
        ("2026-01-10", "p1"),
        ("2026-06-09", "p1"),
        ("2026-06-10", "p2"),
        ("2027-06-10", "p2"),
        ("2027-06-11", "phantom_expired"),
    ],
)
def test_the_latest_session_until_the_scans_day_speaks_for_a_year(scan_day, expected):
    assert chosen(scan_day, TWO) == expected


@pytest.mark.parametrize(
    ("scan_day", "expected"),
    [
        ("2025-12-01", "p1"),
        ("2026-03-26", "p1"),  # 75 days from p1, 76 from p2
        ("2026-03-27", "p2"),  # 76 and 75
        ("2027-06-11", "phantom_expired"),
    ],
)
def test_the_nearest_session_may_be_a_later_one(scan_day, expected):
    assert chosen(scan_day, TWO, rule="nearest") == expected


def test_of_two_sessions_equally_near_the_earlier_speaks():
    pair = [phantom("p1", "2026-01-10"), phantom("p2", "2026-01-20")]
    assert chosen("2026-01-15", pair, rule="nearest") == "p1"


@pytest.mark.parametrize(
    ("scan_day", "expected"),
    [
        ("2026-02-28", "p1"),
        ("2026-03-01", "setup_changed"),
        ("2026-06-09", "setup_changed"),
        ("2026-06-10", "p2"),
    ],
)
def test_a_change_parts_older_phantoms_from_scans(scan_day, expected):
    assert chosen(scan_day, TWO, changed="2026-03-01") == expected


def test_with_nearest_the_other_side_of_a_change_does_not_speak():
    assert chosen("2026-03-26", TWO, changed="2026-03-01", rule="nearest") == "p2"
    assert chosen("2026-02-27", TWO, changed="2026-03-01", rule="nearest") == "p1"


def test_a_phantom_on_the_day_of_a_change_counts_as_made_after_it():
    assert chosen("2026-03-02", [phantom("p1", "2026-03-01")], changed="2026-03-01") == "p1"


def test_valid_until_overrides_the_days():
    kept = [phantom("p1", "2024-01-10", valid_until="2026-12-31")]
    assert chosen("2026-12-31", kept) == "p1"
    assert chosen("2027-01-01", kept) == "phantom_expired"
    # It says nothing about days before the session: there the usual number of days holds.
    assert chosen("2022-12-31", kept, rule="nearest") == "phantom_expired"
    assert chosen("2023-12-31", kept, rule="nearest") == "p1"
    shorter = [phantom("p1", "2026-01-10", valid_until="2026-02-01")]
    assert chosen("2026-02-02", shorter) == "phantom_expired"


def test_an_excluded_phantom_makes_no_session():
    excluded = [phantom("p1", "2026-01-10"), phantom("p2", "2026-06-10", use="no", use_reason="moved")]
    assert chosen("2026-07-01", excluded) == "p1"


def test_a_session_is_dated_by_its_first_phantom():
    members = [phantom("p1", "2026-01-12"), phantom("p1", "2026-01-10")]
    assert group_sessions(members)["quay-1"][0].acquired == day("2026-01-10")
