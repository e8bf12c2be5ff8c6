"""Statements about a run: wording and counts, each by hand from two small states."""

from evenblur.study.changes import after_work, before_work


def scan(setup="quay-1", session="p1", **more):
    return {"setup": setup, "phantom_session": session, "status": "accepted", "input_sha256": "a", "use": "yes", **more}


def study(**more):
    return {
        "program": {"version": "0.1.0", "smooth_scan": "aa", "measure_resolution": "bb"},
        "setup quay-1": {"site": "quay"},
        "setup mill-1": {"site": "mill"},
        "phantom q-points": {"setup": "quay-1", "phantom_session": "p1", "image_sha256": "1", "use": "yes"},
        "phantom q-spheres": {"setup": "quay-1", "phantom_session": "p1", "image_sha256": "2", "use": "yes"},
        "phantom m-points": {"setup": "mill-1", "phantom_session": "p1", "image_sha256": "3", "use": "yes"},
        **{f"scan q{number}": scan() for number in range(5)},
        "scan m0": scan("mill-1"),
        "scan m1": {**scan("mill-1"), "status": "held"},
        **more,
    }


def changed(item, **fields):
    return {**study(), item: {**study()[item], **fields}}


def without(*items):
    return {item: fields for item, fields in study().items() if item not in items}


def test_nothing_changed_says_nothing():
    assert before_work(study(), study()) == []


def test_a_first_run_counts_what_there_is():
    assert before_work({}, study()) == [
        "first run: nothing is recorded of this study yet; it has 2 setups, 3 phantoms, 7 scans"
    ]


def test_a_replaced_phantom_names_its_session_and_counts_accepted_scans_only():
    assert before_work(study(), changed("phantom m-points", image_sha256="9")) == [
        "setup mill-1: phantom session p1 replaced; 1 scan may follow"
    ]


def test_one_of_two_phantoms_of_a_session_is_called_by_name():
    now = changed("phantom q-points", image_sha256="missing")
    expected = ["setup quay-1: phantom session p1: q-points image missing; 5 scans may follow"]
    assert before_work(study(), now) == expected
    assert before_work(now, study()) == [expected[0].replace("image missing", "image back")]


def test_a_phantom_out_of_use_says_why():
    now = changed("phantom q-points", use="no", use_reason="spilled")
    assert "q-points taken out of use (spilled)" in before_work(study(), now)[0]


def test_a_new_session_touches_no_scan_of_another():
    now = study() | {"phantom q-late": {"setup": "quay-1", "phantom_session": "p2", "image_sha256": "5", "use": "yes"}}
    assert before_work(study(), now) == ["setup quay-1: phantom session p2 new; 0 scans may follow"]


def test_many_scans_are_counted_and_few_are_named():
    now = without("scan q0", "scan q1", "scan q2", "scan q3") | {"scan m0": scan("mill-1", input_sha256="b")}
    assert before_work(study(), now) == [
        "setup mill-1: 1 scan (m0) replaced; 1 scan may follow",
        "setup quay-1: 4 scans taken out of the tables; 0 scans may follow",
    ]


def test_a_changed_setup_concerns_all_its_scans():
    now = changed("setup quay-1", changed="2026-04-01", **{"note room": "B"})
    assert before_work(study(), now) == [
        "setup quay-1: changed nothing -> 2026-04-01; note room nothing -> B; 5 scans may follow"
    ]


def test_settings_and_code_are_told_with_their_reach():
    old, now = (
        study() | {"study.yaml": {"target.choose": "coarsest"}},
        study() | {"study.yaml": {"target.choose": "fixed"}},
    )
    now["program"] = {"version": "0.1.0", "smooth_scan": "zz", "measure_resolution": "yy"}
    assert before_work(old, now) == [
        "measuring code changed: all 3 phantoms are measured again",
        "smoothing code changed: all 6 scans are smoothed again",
        "study.yaml: target.choose coarsest -> fixed",
    ]


def plan(quay_mm="5.9031", kernel="5.2000", target="8.1", **more):
    return {
        "target": {"in_plane_mm": target, "axial_mm": target},
        "period quay-1.p1": {"status": "smooth", "measured_in_plane_mm": quay_mm, "kernel_in_plane_mm": kernel},
        "scan a": scan(kernel_in_plane_mm=kernel, output_sha256="o" + kernel),
        "scan b": scan(kernel_in_plane_mm=kernel, output_sha256="p" + kernel),
        **more,
    }


def test_a_wider_phantom_under_the_same_target_is_told_in_millimetres():
    first, second = after_work(plan(), plan("6.3011", "4.9300"), done=True)
    assert first == "target stays 8.1 mm; 2 scans smoothed"
    assert second == (
        "setup quay-1, phantom session p1: in-plane 5.9 -> 6.3 mm; kernel in-plane 5.2 -> 4.9 mm; "
        "2 scans smoothed again"
    )


def test_a_plan_tells_what_is_to_come():
    future = plan("6.3011", "4.9500")
    for name in ("scan a", "scan b"):
        del future[name]["output_sha256"]
    assert after_work(plan(), future, done=False)[0] == "target stays 8.1 mm; 2 scans to smooth"


def test_a_moved_target_and_a_held_scan():
    now = plan(target="8.3") | {"scan b": {**scan(), "status": "held", "reasons": "image_missing"}}
    assert after_work(plan(), now, done=True) == [
        "target in-plane 8.1 -> 8.3 mm, target axial 8.1 -> 8.3 mm; no scan smoothed",
        "1 scan now held (image_missing): b",
    ]


def test_nothing_done_says_nothing():
    assert after_work(plan(), plan(), done=True) == []


def test_hundreds_of_setups_do_not_flood_the_statement():
    old = {f"setup s{n}": {"site": "x"} for n in range(100)}
    new = {f"setup s{n}": {"site": "y"} for n in range(100)}
    told = before_work(old, new)
    assert len(told) == 41
    assert told[-1] == "and 60 setups more"
