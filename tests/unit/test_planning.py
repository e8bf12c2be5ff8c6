"""The whole plan of a small study: statuses, kernels, and every held scan with its reason."""

import json
import math
from types import SimpleNamespace

import pytest

from evenblur.errors import InputError
from evenblur.plan.planning import make_plan
from evenblur.study.rows import PhantomRow, ScanRow, SetupRow
from evenblur.study.settings import Settings


class Builder:
    """A study of tables and records, put together a row at a time."""

    def __init__(self, **settings):
        self.settings = Settings.model_validate({"study": {"title": "Invented"}, **settings})
        self.setups, self.phantoms, self.scans = [], [], []
        self.scans_intake, self.phantoms_intake, self.resolution = {}, {}, {}

    def setup(self, label, **more):
        self.setups.append(SetupRow.model_validate({"setup": label, "site": label.split("-")[0], **more}))
        return self

    def phantom(self, setup, in_plane, axial, *, session="p1", acquired="2026-01-10", **intake):
        label = f"{setup}-{session}-{len(self.phantoms)}"
        row = {"phantom": label, "setup": setup, "phantom_session": session, "acquired": acquired}
        self.phantoms.append(PhantomRow.model_validate({**row, "kind": "uniform_cylinder", "image": f"{label}.nii"}))
        self.phantoms_intake[label] = self._intake(label, **intake)
        if self.phantoms_intake[label]["sha256"] is not None:
            widths = {"in_plane": in_plane, "axial": axial}
            record = {name: w and {"fwhm_mm": w, "se_mm": 0.05, "df": 20.0} for name, w in widths.items()}
            self.resolution[label] = {"phantom": label, "kind": "uniform_cylinder", "flags": [], **record}
        return self

    def scan(self, subject, setup, *, acquired="2026-02-01", table=None, **intake):
        row = {"subject": subject, "session": "base", "setup": setup, "acquired": acquired, "image": f"{subject}.nii"}
        self.scans.append(ScanRow.model_validate({**row, **(table or {})}))
        self.scans_intake[self.scans[-1].entities] = self._intake(subject, **intake)
        return self

    @staticmethod
    def _intake(key, **changes):
        base = {
            "sha256": key,
            "voxels_sha256": key,
            "shape": [100, 100, 40],
            "voxel_mm": [2.0, 2.0, 3.0],
            "axial_axis": 2,
            "oblique_deg": 0.0,
            "reconstruction": RECONSTRUCTION,
            "holds": [],
            "problems": [],
            "flags": [],
        }
        return {**base, **changes}

    def plan(self, **more):
        study = SimpleNamespace(
            settings=self.settings,
            setups=self.setups,
            phantoms=self.phantoms,
            scans=self.scans,
            by_setup={row.setup: row for row in self.setups},
        )
        plan = make_plan(
            study,
            scans_intake=self.scans_intake,
            phantoms_intake=self.phantoms_intake,
            resolution=self.resolution,
            **more,
        )
        return json.loads(json.dumps(plan, allow_nan=False))


RECONSTRUCTION = {
    "ReconMethodName": "OSEM",
    "ReconFilterType": "none",
    "ReconMethodParameters": {"iterations": 4.0, "subsets": 16.0},
    "ManufacturersModelName": "sha256:invented",
}

FIXED = {
    "target": {
        "choose": "fixed",
        "in_plane_mm": 8.0,
        "axial_mm": 8.0,
        "approval": {"by": "an invented board", "on": "2026-01-01", "reason": "agreed"},
    }
}


def reasons(plan):
    return {scan["subject"]: scan["reasons"] for scan in plan["scans"]}


def period(plan, setup):
    return next(entry for entry in plan["periods"] if entry["setup"] == setup)


def test_kernels_are_the_missing_width_in_quadrature():
    plan = Builder(**FIXED).setup("a-1").phantom("a-1", 5.0, 6.0).scan("s1", "a-1").plan()
    entry = period(plan, "a-1")
    assert entry["status"] == "smooth"
    assert entry["kernel"]["in_plane_mm"] == round(math.sqrt(39), 4)
    assert entry["kernel"]["axial_mm"] == round(math.sqrt(28), 4)
    assert plan["counts"] == {"accepted": 1, "held": 0}


def test_a_kernel_too_narrow_to_matter_is_left_out_by_direction():
    study = Builder(**FIXED).setup("a-1").setup("b-1").phantom("a-1", 7.99, 6.0).phantom("b-1", 7.99, 8.2)
    plan = study.scan("s1", "a-1").scan("s2", "b-1").plan()
    first, second = period(plan, "a-1"), period(plan, "b-1")
    assert (first["status"], first["kernel"]["in_plane_mm"]) == ("smooth", 0.0)
    assert first["quadrature"]["in_plane_mm"] == round(math.sqrt(64 - 7.99**2), 4)
    assert (second["status"], second["kernel"]["axial_mm"]) == ("at_target", 0.0)
    assert reasons(plan) == {"s1": [], "s2": []}


def test_a_period_beyond_the_tolerance_is_coarser_and_its_scans_are_held():
    study = Builder(**FIXED).setup("a-1").setup("b-1").phantom("a-1", 8.3, 8.0).phantom("b-1", 8.3001, 5.0)
    plan = study.scan("s1", "a-1").scan("s2", "b-1").plan()
    assert [entry["status"] for entry in plan["periods"]] == ["at_target", "coarser"]
    assert reasons(plan) == {"s1": [], "s2": ["coarser_than_target"]}


def test_coarser_can_stop_the_run_instead():
    study = Builder(**FIXED, coarser_than_target="stop").setup("a-1").phantom("a-1", 9.0, 9.0).scan("s1", "a-1")
    with pytest.raises(InputError, match=r"a-1\.p1"):
        study.plan()


def test_a_direction_without_width_holds_the_scans():
    plan = Builder(**FIXED).setup("a-1").phantom("a-1", 5.0, None).scan("s1", "a-1").plan()
    assert (period(plan, "a-1")["status"], reasons(plan)) == ("unmeasured", {"s1": ["unmeasured"]})


def test_a_declared_width_fills_the_missing_direction():
    declared = {"declared_axial_mm": "6", "declared_source": "data sheet"}
    plan = Builder(**FIXED).setup("a-1", **declared).phantom("a-1", 5.0, None).scan("s1", "a-1").plan()
    assert period(plan, "a-1")["source"] == {"in_plane": "uniform_cylinder", "axial": "declared"}
    assert reasons(plan) == {"s1": []}


def test_a_setup_without_phantoms_has_the_period_declared():
    declared = {"declared_in_plane_mm": "7", "declared_axial_mm": "6", "declared_source": "data sheet"}
    plan = Builder(**FIXED).setup("a-1", **declared).scan("s1", "a-1").plan()
    assert period(plan, "a-1")["phantom_session"] == "declared"
    assert plan["scans"][0]["phantom_session"] == "declared"


def test_a_setup_with_neither_phantom_nor_declaration_speaks_for_no_scan():
    plan = Builder(**FIXED).setup("a-1").setup("b-1").phantom("a-1", 5.0, 5.0).scan("s1", "b-1").plan()
    assert reasons(plan) == {"s1": ["no_phantom_session"]}


def test_the_coarsest_period_in_use_sets_the_target():
    study = Builder().setup("a-1").setup("b-1").setup("c-1")
    study.phantom("a-1", 5.0, 5.0).phantom("b-1", 6.0, 7.0).phantom("c-1", 9.0, 9.0)
    study.scan("s1", "a-1").scan("s2", "b-1").scan("s3", "c-1", table={"use": "no", "use_reason": "moved"})
    plan = study.plan()
    # 7.0 + 2 hypot(0.05, 0.2) = 7.4123, rounded up; c-1 has no scan in use.
    assert plan["target"]["in_plane_mm"] == plan["target"]["axial_mm"] == 7.5
    assert reasons(plan) == {"s1": [], "s2": [], "s3": ["excluded_by_decision"]}


def test_without_any_width_all_scans_are_held_and_nothing_stops():
    plan = Builder().setup("a-1").phantom("a-1", None, None).scan("s1", "a-1").plan()
    assert plan["target"]["in_plane_mm"] is None
    assert reasons(plan) == {"s1": ["unmeasured"]}


def test_intake_faults_and_dates_hold_with_every_reason():
    study = Builder(**FIXED).setup("a-1").phantom("a-1", 5.0, 5.0)
    study.scan("s1", "a-1", sha256=None, voxels_sha256=None, holds=["image_missing"], problems=["the file is missing"])
    study.scan("s2", "a-1", acquired="2025-12-31").scan("s3", "a-1", acquired="2027-01-11")
    found = reasons(study.plan())
    assert found == {"s1": ["image_missing"], "s2": ["no_phantom_session"], "s3": ["phantom_expired"]}


def test_the_same_picture_under_two_subjects_keeps_the_first():
    study = Builder(**FIXED).setup("a-1").phantom("a-1", 5.0, 5.0)
    plan = study.scan("s1", "a-1").scan("s2", "a-1", voxels_sha256="s1").plan()
    assert reasons(plan) == {"s1": [], "s2": ["duplicate_image"]}


def test_a_scan_that_is_a_phantoms_picture_is_held():
    study = Builder(**FIXED).setup("a-1").phantom("a-1", 5.0, 5.0).scan("s1", "a-1", voxels_sha256="a-1-p1-0")
    assert reasons(study.plan()) == {"s1": ["duplicate_image"]}


def test_a_phantom_picture_that_stands_twice_is_one_witness_and_flagged():
    study = Builder(**FIXED).setup("a-1").setup("b-1").phantom("a-1", 5.0, 5.0)
    study.phantom("a-1", 5.0, 5.0, voxels_sha256="a-1-p1-0").phantom("b-1", 6.0, 5.0, voxels_sha256="a-1-p1-0")
    plan = study.scan("s1", "a-1").scan("s2", "b-1").plan()
    assert period(plan, "a-1")["statistical"]["in_plane_se_mm"] == 0.05  # not 0.05 over the root of two
    for setup in ("a-1", "b-1"):
        assert "duplicate_phantom" in [flag["code"] for flag in period(plan, setup)["flags"]]


@pytest.mark.parametrize(("rule", "held"), [("hold", True), ("flag", False)])
def test_a_scan_reconstructed_unlike_its_phantom_is_held_or_flagged(rule, held):
    study = Builder(**FIXED, reconstruction_mismatch=rule).setup("a-1")
    study.phantom("a-1", 5.0, 5.0, reconstruction={"ReconFilterSize": 5, "ReconMethodName": "OSEM"})
    study.scan("s1", "a-1", reconstruction={"ReconFilterSize": 3, "ReconMethodName": "OSEM"})
    study.scan("s2", "a-1", reconstruction={"ReconMethodName": "OSEM"}).scan("s3", "a-1", reconstruction={})
    plan = study.plan()
    assert reasons(plan) == {"s1": ["reconstruction_mismatch"] if held else [], "s2": [], "s3": []}
    assert ("reconstruction_differs" in [flag["code"] for flag in plan["scans"][0]["flags"]]) != held


def test_few_voxels_across_the_width_are_flagged():
    study = Builder(**FIXED, reconstruction_mismatch="flag").setup("a-1").phantom("a-1", 5.0, 5.0)
    plan = study.scan("s1", "a-1", voxel_mm=[2.0, 2.0, 3.5]).scan("s2", "a-1", voxel_mm=[2.0, 2.0, 3.3]).plan()
    flagged = [[flag["code"] for flag in scan["flags"]].count("under_sampled_width") for scan in plan["scans"]]
    assert flagged == [1, 0]  # 5.0 / 3.5 = 1.43, 5.0 / 3.3 = 1.52


@pytest.mark.parametrize(("axial", "held"), [(5.0, False), (5.04, False), (6.0, True)])
def test_a_tilted_grid_is_used_only_where_both_kernels_agree(axial, held):
    study = Builder(**FIXED).setup("a-1").phantom("a-1", 5.0, axial).scan("s1", "a-1", oblique_deg=5.0)
    plan = study.plan()
    # kernels: sqrt(64 - 25) = 6.245; sqrt(64 - 25.4) = 6.213, 0.5 % apart; sqrt(28) = 5.29, 15 % apart.
    assert reasons(plan)["s1"] == (["oblique_grid"] if held else [])
    if not held:
        assert [flag["code"] for flag in plan["scans"][0]["flags"]] == ["oblique_grid_used"]


def test_too_few_slices_hold_only_where_the_axial_kernel_is_wider():
    study = Builder(**FIXED).setup("a-1").setup("b-1").phantom("a-1", 5.0, 5.0).phantom("b-1", 5.0, 8.0)
    plan = study.scan("s1", "a-1", shape=[100, 100, 2]).scan("s2", "b-1", shape=[100, 100, 2]).plan()
    assert reasons(plan) == {"s1": ["too_few_slices"], "s2": []}


def test_less_than_a_voxel_across_the_width_holds():
    study = Builder(**FIXED, reconstruction_mismatch="flag").setup("a-1").phantom("a-1", 5.0, 5.0)
    plan = study.scan("s1", "a-1", voxel_mm=[2.0, 2.0, 5.5]).scan("s2", "a-1", voxel_mm=[2.0, 2.0, 5.0]).plan()
    assert reasons(plan) == {"s1": ["under_sampled"], "s2": []}


def test_a_phantom_without_image_leaves_its_period_unmeasured_not_an_older_one_in_its_place():
    gone = {"sha256": None, "voxels_sha256": None, "voxel_mm": None, "shape": None, "axial_axis": None}
    study = Builder(**FIXED).setup("a-1").phantom("a-1", 5.0, 5.0)
    study.phantom("a-1", 5.0, 5.0, session="p2", acquired="2026-01-20", holds=["image_missing"], **gone)
    plan = study.scan("s1", "a-1", acquired="2026-01-15").scan("s2", "a-1").plan()
    assert reasons(plan) == {"s1": [], "s2": ["unmeasured"]}


@pytest.mark.parametrize(
    ("words", "kind", "flagged"),
    [
        ("ordered subsets, 4 iterations", "point_source", True),
        ("OSEM with 5 mm filter", "line_source", True),
        ("filtered back-projection, 6 mm filter", "point_source", False),
        ("ordered subsets, 4 iterations", "uniform_cylinder", False),
    ],
)
def test_a_bare_source_under_an_iterative_reconstruction_is_flagged(words, kind, flagged):
    study = Builder(**FIXED).setup("a-1", reconstruction=words).phantom("a-1", 5.0, 5.0).scan("s1", "a-1")
    study.resolution["a-1-p1-0"]["kind"] = kind
    codes = [flag["code"] for flag in period(study.plan(), "a-1")["flags"]]
    assert ("source_without_background" in codes) == flagged


def test_phantoms_of_one_session_and_kind_are_averaged():
    study = Builder(**FIXED).setup("a-1").phantom("a-1", 5.0, 5.0).phantom("a-1", 6.0, 5.0)
    plan = study.scan("s1", "a-1").plan()
    assert plan["periods"][0]["measured"]["in_plane_mm"] == 5.5
    assert len(plan["periods"]) == 1


def flags_of(plan, subject):
    return [flag["code"] for scan in plan["scans"] if scan["subject"] == subject for flag in scan["flags"]]


def test_a_later_copy_is_held_though_the_first_is_held_for_a_reason_of_its_own():
    study = Builder(**FIXED).setup("a-1").phantom("a-1", 5.0, 5.0)
    plan = study.scan("s1", "a-1", acquired="2025-12-31").scan("s2", "a-1", voxels_sha256="s1").plan()
    assert reasons(plan) == {"s1": ["no_phantom_session"], "s2": ["duplicate_image"]}


def test_a_copy_of_a_row_that_a_decision_took_out_is_used():
    out = {"use": "no", "use_reason": "wrong subject", "decided_by": "invented board"}
    study = Builder(**FIXED).setup("a-1").phantom("a-1", 5.0, 5.0).scan("s1", "a-1", table=out)
    plan = study.scan("s2", "a-1", voxels_sha256="s1").plan()
    assert reasons(plan) == {"s1": ["excluded_by_decision"], "s2": []}
    assert plan["scans"][0]["note"] == "wrong subject (decided by invented board)"


def test_a_phantom_that_intake_holds_gives_no_width():
    study = Builder(**FIXED).setup("a-1").phantom("a-1", 5.0, 5.0)
    held = {"holds": ["image_unreadable"], "problems": ["qform and sform are 9.0 degrees apart; correct the header"]}
    plan = study.phantom("a-1", 6.0, 6.0, **held).scan("s1", "a-1").plan()
    entry = period(plan, "a-1")
    assert entry["measured"]["in_plane_mm"] == 5.0  # not the mean with the one that is held
    assert "phantom_missing" in [flag["code"] for flag in entry["flags"]]
    alone = Builder(**FIXED).setup("a-1").phantom("a-1", 6.0, 6.0, **held).scan("s1", "a-1").plan()
    assert reasons(alone) == {"s1": ["unmeasured"]}


@pytest.mark.parametrize(
    ("voxel_mm", "held"),
    [([2.0, 2.0, 3.0], False), ([2.01, 2.01, 3.0], False), ([2.1, 2.1, 3.0], True), ([2.0, 2.0, 2.0], True)],
)
@pytest.mark.parametrize("rule", ["hold", "flag"])
def test_other_voxels_than_the_phantoms_hold_unless_the_study_only_flags(voxel_mm, held, rule):
    study = Builder(**FIXED, reconstruction_mismatch=rule).setup("a-1").phantom("a-1", 5.0, 5.0)
    plan = study.scan("s1", "a-1", voxel_mm=voxel_mm).plan()
    assert reasons(plan)["s1"] == (["reconstruction_mismatch"] if held and rule == "hold" else [])
    assert flags_of(plan, "s1") == (["voxel_size_differs"] if held and rule == "flag" else [])


def test_only_phantoms_behind_the_width_are_compared():
    study = Builder(**FIXED).setup("a-1").phantom("a-1", 5.0, 5.0).phantom("a-1", 5.0, 5.0, voxel_mm=[4.0, 4.0, 4.0])
    study.resolution["a-1-p1-1"]["kind"] = "point_source"  # further down in the order of trust
    assert reasons(study.scan("s1", "a-1").plan()) == {"s1": []}


def test_all_differences_from_the_phantom_stand_in_the_note():
    study = Builder(**FIXED).setup("a-1").phantom("a-1", 5.0, 5.0)
    other = {**RECONSTRUCTION, "ReconMethodName": "FBP"}
    plan = study.scan("s1", "a-1", voxel_mm=[3.0, 3.0, 3.0], reconstruction=other).plan()
    assert reasons(plan) == {"s1": ["reconstruction_mismatch"]}
    assert "method (FBP against OSEM)" in plan["scans"][0]["note"]
    assert "voxels of the scan 3 mm" in plan["scans"][0]["note"]


def test_what_is_not_stated_is_flagged_once():
    study = Builder(**FIXED).setup("a-1").phantom("a-1", 5.0, 5.0).phantom("a-1", 5.0, 5.0)
    plan = study.scan("s1", "a-1", reconstruction={}).scan("s2", "a-1", shape=[90, 100, 40]).plan()
    assert flags_of(plan, "s1") == ["reconstruction_unverified"]
    assert set(flags_of(plan, "s2")) == {"matrix_differs"}


@pytest.mark.parametrize(
    ("phantom", "table", "header", "flagged"),
    [("F18", "F-18", None, False), ("F18", "C-11", None, True), ("F18", None, "C11", True), ("F18", None, None, False)],
)
def test_radionuclides_are_compared_where_both_are_known(phantom, table, header, flagged):
    study = Builder(**FIXED).setup("a-1").phantom("a-1", 5.0, 5.0, radionuclide=phantom)
    plan = study.scan("s1", "a-1", table={"radionuclide": table} if table else {}, radionuclide=header).plan()
    assert ("radionuclide_differs" in flags_of(plan, "s1")) == flagged


def test_units_unlike_the_studys_usual_ones_are_flagged():
    study = Builder(**FIXED).setup("a-1").phantom("a-1", 5.0, 5.0).scan("s1", "a-1", units="kBq/mL")
    study.scan("s2", "a-1", units="Bq/mL").scan("s3", "a-1", units="BQML").scan("s4", "a-1", units=None)
    plan = study.plan()
    assert [flags_of(plan, f"s{number}") for number in (1, 2, 3, 4)] == [["units_differ"], [], [], []]
    assert all(not found for found in reasons(plan).values())


def test_a_result_of_the_study_that_comes_back_as_a_scan_is_held():
    study = Builder(**FIXED).setup("a-1").phantom("a-1", 5.0, 5.0).scan("s1", "a-1").scan("s2", "a-1")
    plan = study.plan(outputs={"s2": "sub-s1_ses-base"})
    assert reasons(plan) == {"s1": [], "s2": ["already_harmonised"]}


def test_a_phantom_older_than_its_days_that_a_decision_lets_speak_is_flagged():
    study = Builder(**FIXED).setup("a-1").phantom("a-1", 5.0, 5.0)
    decided = {"valid_until": "2027-12-31", "decided_by": "invented physicist", "use_reason": "camera is stable"}
    study.phantoms[0] = PhantomRow.model_validate({**study.phantoms[0].model_dump(mode="json"), **decided})
    plan = study.scan("s1", "a-1", acquired="2027-06-01").scan("s2", "a-1").plan()
    assert [flags_of(plan, subject) for subject in ("s1", "s2")] == [["validity_extended"], []]
    text = plan["scans"][0]["flags"][0]["text"]
    assert "2027-12-31 (decided by invented physicist): camera is stable" in text
