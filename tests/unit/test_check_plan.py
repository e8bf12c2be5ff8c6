"""The plan and its second writing in the auditor's check agree on invented studies, and on no changed number."""

import copy
import datetime
import json
from pathlib import Path
from types import SimpleNamespace

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from evenblur.check.drift import check_drift
from evenblur.check.findings import DisagreementError
from evenblur.check.handover import Handover
from evenblur.check.periods import give_kernels, list_periods, own_target
from evenblur.check.tables import check_plan
from evenblur.plan.planning import make_plan
from evenblur.study.rows import PhantomRow, ScanRow, SetupRow
from evenblur.study.settings import KINDS, Settings

APPROVAL = {"by": "an invented board", "on": "2026-01-01", "reason": "agreed"}
widths = st.integers(30000, 90000).map(lambda n: n / 10000)
errors = st.none() | st.integers(100, 3000).map(lambda n: n / 10000)
days = st.integers(0, 500).map(lambda n: (datetime.date(2025, 1, 1) + datetime.timedelta(n)).isoformat())


@st.composite
def study_settings(draw):
    if draw(st.booleans()):
        target = {"choose": "fixed", "in_plane_mm": draw(widths), "axial_mm": draw(widths), "approval": APPROVAL}
    else:
        target = {
            "isotropic": draw(st.booleans()),
            "allowance_se": draw(st.sampled_from([0.0, 1.0, 2.0])),
            "round_up_to_mm": draw(st.sampled_from([0.1, 0.25, 0.3, 1.0])),
            "declared_counts": draw(st.booleans()),
        }
    phantoms = {
        "choose": draw(st.sampled_from(["latest_before", "nearest"])),
        "valid_days": draw(st.sampled_from([30, 365])),
        "repeatability_mm": draw(st.sampled_from([0.0, 0.2])),
        "prefer": draw(st.permutations(KINDS)),
    }
    kernel = draw(st.sampled_from(["quadrature", "matched"]))
    return {"study": {"title": "Invented"}, "target": target, "phantoms": phantoms, "kernel": kernel}


def intake(key, picture, **more):
    base = {"sha256": key, "voxels_sha256": picture, "shape": [100, 100, 60], "voxel_mm": [1.0, 1.0, 1.0]}
    base |= {"axial_axis": 2, "oblique_deg": 0.0, "holds": [], "problems": [], "flags": [], "reconstruction": {}}
    return {**base, **more}


@st.composite
def studies(draw):
    """Settings, rows and records of a study."""
    made = SimpleNamespace(setups=[], phantoms=[], scans=[], phantom_intake={}, scan_intake={}, resolution={})
    made.settings = Settings.model_validate(draw(study_settings()))
    for number in range(draw(st.integers(1, 4))):
        declared = {"declared_in_plane_mm": draw(widths), "declared_axial_mm": draw(widths), "declared_source": "x"}
        changed = ";".join(draw(st.lists(days, max_size=2)))
        row = {"setup": f"s-{number}", "site": f"s{number}", "changed": changed}
        made.setups.append(SetupRow.model_validate({**row, **(declared if draw(st.booleans()) else {})}))
        for phantom in range(draw(st.integers(0, 4))):
            add_phantom(draw, made, f"s-{number}", f"p{number}{phantom}")
    for number in range(draw(st.integers(1, 8))):
        add_scan(draw, made, number)
    return made


def add_phantom(draw, made, setup, label):
    kind = draw(st.sampled_from(["uniform_cylinder", "point_source", "line_source"]))
    row = {"phantom": label, "setup": setup, "phantom_session": draw(st.sampled_from(["one", "two"])), "kind": kind}
    row |= {"acquired": draw(days), "image": f"{label}.nii", "valid_until": draw(st.none() | days)}
    if draw(st.integers(0, 5)) == 0:
        row |= {"use": "no", "use_reason": "invented"}
    made.phantoms.append(PhantomRow.model_validate(row))
    copied = made.phantom_intake and draw(st.integers(0, 5)) == 0
    picture = next(iter(made.phantom_intake.values()))["voxels_sha256"] if copied else label
    made.phantom_intake[label] = intake(label, picture)
    if made.phantoms[-1].use == "yes":
        record = {"phantom": label, "kind": kind, "flags": []}
        for direction in ("in_plane", "axial"):
            given_width = draw(st.integers(0, 5)) > 0
            record[direction] = {"fwhm_mm": draw(widths), "se_mm": draw(errors), "df": 20.0} if given_width else None
        made.resolution[label] = record


def add_scan(draw, made, number):
    setup = draw(st.sampled_from([row.setup for row in made.setups]))
    row = {
        "subject": f"q{number}",
        "session": "base",
        "setup": setup,
        "acquired": draw(days),
        "image": f"q{number}.nii",
    }
    if draw(st.integers(0, 5)) == 0:
        row |= {"use": "no", "use_reason": "invented"}
    made.scans.append(ScanRow.model_validate(row))
    gone = {"holds": ["image_missing"], "problems": ["gone; send it"], "sha256": None, "voxels_sha256": None}
    broken = gone if draw(st.integers(0, 6)) == 0 else {}
    picture = draw(st.sampled_from([f"q{number}", f"q{number}", "q0", *made.phantom_intake]))
    made.scan_intake[made.scans[-1].entities] = intake(f"q{number}", picture, **broken)


def plan_of(made, draw_matching):
    """The library's plan, its kernels matched where the study asks for it."""
    study = SimpleNamespace(
        settings=made.settings,
        setups=made.setups,
        phantoms=made.phantoms,
        scans=made.scans,
        by_setup={row.setup: row for row in made.setups},
    )
    records = {
        "scans_intake": made.scan_intake,
        "phantoms_intake": made.phantom_intake,
        "resolution": made.resolution,
    }
    made.matching = {}
    if made.settings.kernel == "matched":
        for period in make_plan(study, **records)["periods"]:
            if period["status"] == "smooth" and any(period["source_phantoms"].values()):
                kernel = {f"{name}_mm": draw_matching(widths) for name in ("in_plane", "axial")}
                record = {"kernel": kernel, "settled": draw_matching(st.booleans())}
                made.matching[f"{period['setup']}.{period['phantom_session']}"] = record
    return json.loads(json.dumps(make_plan(study, matching=made.matching, **records), allow_nan=False))


def check(made, plan):
    rows = [[row.model_dump(mode="json") for row in rows] for rows in (made.setups, made.phantoms, made.scans)]
    bag = Handover(Path(), made.settings.model_dump(mode="json"), *rows, plan, {})
    bag.phantom_intake, bag.scan_intake = made.phantom_intake, made.scan_intake
    bag.resolution, bag.matching = made.resolution, made.matching
    periods = list_periods(bag)
    target = own_target(bag, periods)
    give_kernels(bag, periods, target)
    return check_plan(bag, periods, target) + check_drift(bag, periods)


@settings(max_examples=300)
@given(studies(), st.data())
def test_both_writings_of_the_plan_agree(made, data):
    check(made, plan_of(made, data.draw))


def places(value, path=()):
    """Where numbers, statuses and reasons stand that the check speaks for."""
    if isinstance(value, dict):
        for key, part in value.items():
            if key not in ("flags", "other_kinds", "note", "notes", "acquired", "decided_by", "choose"):
                yield from places(part, (*path, key))
    elif isinstance(value, list):
        for index, part in enumerate(value):
            yield from places(part, (*path, index))
    elif isinstance(value, float):
        yield path


def example():
    made = SimpleNamespace(setups=[], phantoms=[], scans=[], phantom_intake={}, scan_intake={}, resolution={})
    made.settings = Settings.model_validate({"study": {"title": "Invented"}})
    for number, (in_plane, axial) in enumerate([(5.0, 6.0), (7.0, 6.5)]):
        setup = f"s-{number}"
        made.setups.append(SetupRow.model_validate({"setup": setup, "site": f"s{number}"}))
        row = {"phantom": setup, "setup": setup, "phantom_session": "p1", "kind": "uniform_cylinder"}
        made.phantoms.append(PhantomRow.model_validate({**row, "acquired": "2026-01-01", "image": "x.nii"}))
        made.phantom_intake[setup] = intake(setup, setup)
        sizes = {"in_plane": in_plane, "axial": axial}
        record = {name: {"fwhm_mm": w, "se_mm": 0.05, "df": 20.0} for name, w in sizes.items()}
        made.resolution[setup] = {"phantom": setup, "kind": "uniform_cylinder", "flags": [], **record}
        scan = {"subject": f"q{number}", "session": "base", "setup": setup, "acquired": "2026-02-01", "image": "y.nii"}
        made.scans.append(ScanRow.model_validate(scan))
        made.scan_intake[made.scans[-1].entities] = intake(f"q{number}", f"q{number}")
    return made


def with_sessions(made, number):
    """More sessions of the first setup, each a little wider; the last one far off."""
    for session in range(2, number + 1):
        label = f"s-0-p{session}"
        row = {"phantom": label, "setup": "s-0", "phantom_session": f"p{session}", "kind": "uniform_cylinder"}
        row |= {"acquired": f"2026-01-{session:02}", "image": "x.nii"}
        made.phantoms.append(PhantomRow.model_validate(row))
        made.phantom_intake[label] = intake(label, label)
        wide = 5.0 + 0.03 * (session % 3) + 3.0 * (session == number)
        widths_of = {name: {"fwhm_mm": wide, "se_mm": 0.05, "df": 20.0} for name in ("in_plane", "axial")}
        made.resolution[label] = {"phantom": label, "kind": "uniform_cylinder", "flags": [], **widths_of}
    return made


@pytest.mark.parametrize("sessions", [2, 4, 12])
def test_a_width_that_drifts_is_worked_out_and_cannot_be_hushed_up(sessions):
    made = with_sessions(example(), sessions)
    plan = plan_of(made, None)
    check(made, plan)
    last = next(period for period in plan["periods"] if period["phantom_session"] == f"p{sessions}")
    assert [flag["code"] for flag in last["flags"]].count("width_drifts") == 2
    for path in (path for path in places(plan) if path[0] == "drift"):
        changed = copy.deepcopy(plan)
        point = changed["drift"][path[1]]["points"][path[3]]
        point[path[4]] = round(point[path[4]] + 0.0001, 4)
        with pytest.raises(DisagreementError, match="drift"):
            check(made, changed)
    last["flags"] = [flag for flag in last["flags"] if flag["code"] != "width_drifts"]
    with pytest.raises(DisagreementError, match="width_drifts"):
        check(made, plan)


def test_every_changed_number_of_a_plan_is_found():
    made = example()
    plan = plan_of(made, None)
    check(made, plan)
    found = list(places(plan))
    assert len(found) >= 2 + 2 * 10
    for path in found:
        changed = copy.deepcopy(plan)
        part = changed
        for key in path[:-1]:
            part = part[key]
        part[path[-1]] = round(part[path[-1]] + 0.0001, 4)
        with pytest.raises(DisagreementError):
            check(made, changed)


@pytest.mark.parametrize(
    "change",
    [
        lambda plan: plan["periods"][0].update(status="at_target"),
        lambda plan: plan["periods"].pop(),
        lambda plan: plan["periods"].reverse(),
        lambda plan: plan["scans"].pop(),
        lambda plan: plan["scans"][0].update(status="held"),
        lambda plan: plan["scans"][0].update(status="held", reasons=["phantom_expired"]),
        lambda plan: plan["scans"][0].update(phantom_session="p2"),
        lambda plan: plan["scans"][0].update(sha256="other"),
        lambda plan: plan["scans"][0].update(days_from_phantom=1),
        lambda plan: plan["scans"][0].update(image="other.nii"),
        lambda plan: plan["periods"][0]["source"].update(axial="declared"),
        lambda plan: plan["periods"][0]["kernel"].update(rule="matched"),
    ],
)
def test_changed_words_of_a_plan_are_found(change):
    made = example()
    plan = plan_of(made, None)
    change(plan)
    with pytest.raises(DisagreementError):
        check(made, plan)
