"""The audit's tables: columns as agreed, one row an item, plain cells; queries; what makes a data set not clean."""

import csv
import io
import json
from dataclasses import replace
from math import sqrt

import pytest

from audit_example import PERIODS, VERDICTS, example_audit, settings
from evenblur.audit.inputs import faults, load_audit_input, stray_files
from evenblur.audit.periods import odd_versions
from evenblur.audit.queries import QUERIES_COLUMNS, queries_rows
from evenblur.audit.tables import SCANS_COLUMNS, SITES_COLUMNS, number, scans_rows, sites_rows, table_text
from evenblur.errors import InputError

# Typed from the tables that users were promised; a column may be added at the end only.
PROMISED_SITES = """setup site scanner reconstruction phantom_session phantom_kinds measured_in_plane_mm
measured_in_plane_se_mm measured_axial_mm measured_axial_se_mm target_in_plane_mm target_axial_mm kernel_in_plane_mm
kernel_axial_mm achieved_in_plane_mm achieved_axial_mm verdict scans_accepted scans_held phantom_sha256 flags
quadrature_kernel_in_plane_mm quadrature_kernel_axial_mm kernel_rule resulting_in_plane_se_mm resulting_axial_se_mm"""
PROMISED_SCANS = """subject session setup phantom_session status reasons kernel_in_plane_mm kernel_axial_mm voxel_mm
frames input input_sha256 output output_sha256 total_before total_after smoothing_version days_from_phantom flags"""


def read(text):
    return list(csv.DictReader(io.StringIO(text), delimiter="\t", quoting=csv.QUOTE_NONE))


def sites(audit):
    return {row["setup"]: row for row in read(table_text(SITES_COLUMNS, sites_rows(audit)))}


def scans(audit):
    return {row["subject"]: row for row in read(table_text(SCANS_COLUMNS, scans_rows(audit)))}


def queries(audit):
    return {(row["item"], row["code"]): row for row in read(table_text(QUERIES_COLUMNS, queries_rows(audit)))}


def test_columns_stand_in_the_promised_order():
    assert list(SITES_COLUMNS) == PROMISED_SITES.split()
    assert list(SCANS_COLUMNS) == PROMISED_SCANS.split()
    assert list(QUERIES_COLUMNS) == ["site", "item", "code", "sentence", "who_acts"]


def test_every_line_has_all_cells():
    audit = example_audit()
    for columns, rows in (
        (SITES_COLUMNS, sites_rows(audit)),
        (SCANS_COLUMNS, scans_rows(audit)),
        (QUERIES_COLUMNS, queries_rows(audit)),
    ):
        lines = table_text(columns, rows).split("\n")
        assert lines.pop() == ""
        assert len(lines) == len(rows) + 1
        assert {line.count("\t") for line in lines} == {len(columns) - 1}


def test_each_period_has_its_verdict():
    assert {setup: row["verdict"] for setup, row in sites(example_audit()).items()} == VERDICTS


def test_a_periods_row_says_what_the_records_say():
    row = sites(example_audit())["A"]
    assert row["site"] == "siteA"
    assert row["phantom_kinds"] == "uniform_cylinder"
    assert (row["measured_in_plane_mm"], row["target_in_plane_mm"], row["achieved_in_plane_mm"]) == ("5.2", "7", "7.02")
    assert float(row["kernel_in_plane_mm"]) == pytest.approx(sqrt(49 - 5.2**2), abs=5e-5)  # four decimals
    assert row["quadrature_kernel_in_plane_mm"] == row["kernel_in_plane_mm"]
    assert row["kernel_rule"] == "quadrature"
    # The error with repeatability (0.2 mm), times measured / target; four decimals, from an se of four decimals.
    assert float(row["resulting_in_plane_se_mm"]) == pytest.approx(5.2 / 7 * sqrt(0.06**2 + 0.2**2), abs=1e-4)
    assert (row["scans_accepted"], row["scans_held"]) == ("2", "0")
    assert row["phantom_sha256"] == "a" * 64


def test_what_is_not_known_is_an_empty_cell():
    row = sites(example_audit())["G"]
    empty = (
        "measured_axial_mm",
        "measured_axial_se_mm",
        "kernel_axial_mm",
        "achieved_axial_mm",
        "resulting_axial_se_mm",
    )
    assert [row[name] for name in empty] == [""] * 5


def test_hashes_and_flags_are_joined():
    audit = example_audit()
    plan = json.loads(json.dumps(audit.plan))
    plan["periods"][0]["phantoms"] = ["phA", "phB"]
    plan["periods"][0]["flags"] = [{"code": "kinds_disagree", "text": "", "value": 1.0}, {"code": "declared_width"}]
    row = sites(replace(audit, plan=plan))["A"]
    assert row["phantom_sha256"] == f"{'a' * 64};{'b' * 64}"
    assert row["phantom_kinds"] == "uniform_cylinder;hot_spheres"
    assert row["flags"] == "kinds_disagree;declared_width"


def test_numbers_are_short_and_never_minus_zero():
    shown = [number(value) for value in (7.0, 5.25, 1 / 3, -0.00001, 0.0, 1234.56789, 100.0, None)]
    assert shown == ["7", "5.25", "0.3333", "0", "0", "1234.5679", "100", ""]
    assert number(20.0, decimals=0) == "20"


def test_an_accepted_scans_row():
    row = scans(example_audit())["a01"]
    assert row["status"] == "accepted"
    assert row["reasons"] == ""
    assert row["voxel_mm"] == "2;2;3.27"
    assert row["input"] == "data/a01.nii.gz"
    assert row["output"] == "results/harmonised/sub-a01/ses-base/pet/sub-a01_ses-base_desc-harmonised_pet.nii.gz"
    assert float(row["total_after"]) / float(row["total_before"]) - 1 == pytest.approx(0.375 / 123456789.125, rel=0.5)
    assert (row["days_from_phantom"], row["smoothing_version"]) == ("10", "0.1 4f2c")


def test_a_held_scans_row_has_reasons_and_no_output():
    row = scans(example_audit())["a04"]
    assert (row["status"], row["reasons"]) == ("held", "phantom_expired;code_from_tomorrow")
    assert [row[name] for name in ("kernel_in_plane_mm", "output", "output_sha256", "phantom_session")] == [""] * 4


def test_spect_results_lie_in_their_own_folder():
    audit = example_audit(settings={**settings(), "modality": "spect"})
    assert scans(audit)["a01"]["output"].endswith("/spect/sub-a01_ses-base_desc-harmonised_spect.nii.gz")


def test_tabs_and_line_ends_never_reach_a_cell():
    audit = example_audit()
    setups = tuple({**row, "scanner": "two\tparts\nof\r\na name"} for row in audit.setups)
    text = table_text(SITES_COLUMNS, sites_rows(replace(audit, setups=setups)))
    assert "two parts of a name" in text
    assert text.count("\n") == len(PERIODS) + 1


def test_rows_keep_the_plans_order():
    audit = example_audit()
    assert [row["setup"] for row in sites_rows(audit)] == list(PERIODS)
    assert [row["subject"] for row in scans_rows(audit)] == [scan["subject"] for scan in audit.plan["scans"]]


def test_every_held_scan_has_a_query_for_each_reason():
    audit = example_audit()
    asked = queries(audit)
    held = [scan for scan in audit.plan["scans"] if scan["status"] == "held"]
    assert held
    for scan in held:
        for reason in scan["reasons"]:
            assert scan["entities"] in asked[scan["entities"], reason]["sentence"]


def test_every_period_that_does_not_pass_has_a_query():
    asked = queries(example_audit())
    for setup, word in VERDICTS.items():
        name = f"{setup}.declared" if setup == "E" else f"{setup}.s1"
        assert ((name, word) in asked) == (word != "pass")


def test_each_query_says_who_acts_and_is_one_sentence_to_send():
    for row in queries(example_audit()).values():
        assert row["who_acts"] in ("site", "physicist", "data manager")
        assert row["sentence"][0].isupper()
        assert row["sentence"].endswith(".")
        assert "`" not in row["sentence"]
        assert "  " not in row["sentence"]


def test_an_unknown_code_is_asked_about_in_plain_words():
    row = queries(example_audit())["sub-a04_ses-base", "code_from_tomorrow"]
    assert "code from tomorrow" in row["sentence"]
    assert row["who_acts"] == "data manager"


def test_a_held_scans_note_stands_in_its_sentence():
    audit = example_audit()
    noted = [{**scan, "notes": {"phantom_expired": "the latest is 405 days away."}} for scan in audit.plan["scans"]]
    row = queries(replace(audit, plan={**audit.plan, "scans": noted}))["sub-a04_ses-base", "phantom_expired"]
    assert "too old for the scan (the latest is 405 days away). Please" in row["sentence"]


def test_a_missing_phantom_image_is_asked_for_once():
    audit = example_audit()
    intake = {**audit.intake_phantoms, "phC": {"holds": ["image_missing"], "flags": [], "sha256": None}}
    row = queries(replace(audit, intake_phantoms=intake))["phC", "phantom_missing"]
    assert row["site"] == "siteC"
    assert row["who_acts"] == "site"


def test_a_phantom_out_of_use_is_not_asked_about():
    audit = example_audit()
    intake = {**audit.intake_phantoms, "old": {"holds": ["image_missing"], "flags": [], "sha256": None}}
    assert not [item for item, _ in queries(replace(audit, intake_phantoms=intake)) if item == "old"]


def test_a_setup_without_any_period_is_asked_about():
    audit = example_audit()
    lonely = {"setup": "Z", "site": "siteZ", "scanner": "", "reconstruction": ""}
    asked = queries(replace(audit, setups=(*audit.setups, lonely)))
    assert asked["Z", "no_phantom_session"]["site"] == "siteZ"


def test_a_flag_that_somebody_must_answer_is_asked_about():
    asked = queries(example_audit())
    assert asked["sub-b01_ses-base", "units_unknown"]["who_acts"] == "data manager"


def test_what_the_scans_of_a_setup_share_is_asked_about_once():
    audit = example_audit()
    flag = {"code": "units_unstated", "text": "nothing states the unit", "value": None}
    flagged = {
        name: {**record, "flags": [flag]} if name in ("sub-a01_ses-base", "sub-a02_ses-base") else record
        for name, record in audit.intake_scans.items()
    }
    scans = sum(scan["setup"] == "A" for scan in audit.plan["scans"])
    asked = [row for row in queries_rows(replace(audit, intake_scans=flagged)) if row["code"] == "units_unstated"]
    assert [(row["site"], row["item"], row["who_acts"]) for row in asked] == [("siteA", "A", "site")]
    assert f"About 2 of the {scans} scans of setup A: nothing states the unit." in asked[0]["sentence"]


def test_a_clean_data_set_has_neither_strays_nor_faults():
    audit = example_audit()
    assert stray_files(audit) == []
    assert faults(audit) == []


def test_a_file_that_no_accepted_row_stands_for_is_a_stray():
    audit = example_audit()
    held = "results/harmonised/sub-f01/ses-base/pet/sub-f01_ses-base_desc-harmonised_pet.nii.gz"
    files = (*audit.harmonised_files, held, "results/harmonised/notes.txt")
    assert stray_files(replace(audit, harmonised_files=files)) == ["results/harmonised/notes.txt", held]


def test_a_missing_half_of_a_pair_is_a_fault():
    audit = example_audit()
    gone = "results/harmonised/sub-a01/ses-base/pet/sub-a01_ses-base_desc-harmonised_pet.nii.gz"
    files = tuple(name for name in audit.harmonised_files if name != gone)
    assert [sentence for sentence in faults(replace(audit, harmonised_files=files)) if "sub-a01_ses-base" in sentence]
    records = {name: record for name, record in audit.scan_records.items() if name != "sub-a02_ses-base"}
    assert [sentence for sentence in faults(replace(audit, scan_records=records)) if "sub-a02_ses-base" in sentence]


@pytest.mark.parametrize(
    "change", [{"input": {"path": "x", "sha256": "other"}}, {"kernel": {"in_plane_mm": 1.0, "axial_mm": 1.0}}]
)
def test_a_record_that_does_not_fit_the_plan_is_a_fault(change):
    audit = example_audit()
    name = "sub-a01_ses-base"
    record = {"Evenblur": {**audit.scan_records[name]["Evenblur"], **change}}
    assert len(faults(replace(audit, scan_records={**audit.scan_records, name: record}))) == 1


def test_mixed_versions_are_flagged_on_the_odd_scan_and_its_period():
    audit = example_audit()
    name = "sub-c02_ses-base"
    block = {**audit.scan_records[name]["Evenblur"], "smoothing_version": "0.2 77aa"}
    mixed = replace(audit, scan_records={**audit.scan_records, name: {"Evenblur": block}})
    assert odd_versions(audit) == set()
    assert odd_versions(mixed) == {name}
    flagged = {subject for subject, row in scans(mixed).items() if "mixed_versions" in row["flags"].split(";")}
    assert flagged == {"c02"}
    assert {setup for setup, row in sites(mixed).items() if "mixed_versions" in row["flags"].split(";")} == {"C"}


def write_records(folder, audit):
    """The example's records as the run's files."""

    def put(name, record):
        path = folder / "results" / name
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_text(json.dumps(record), encoding="utf-8")

    put("plan.json", audit.plan)
    for label, record in audit.resolution.items():
        put(f"resolution/{label}.json", record)
    for label, record in audit.intake_phantoms.items():
        put(f"intake/phantoms/{label}.json", record)
    for name, record in audit.intake_scans.items():
        put(f"intake/scans/{name}.json", record)
    for (setup, session), record in audit.achieved.items():
        put(f"achieved/{setup}.{session}.json", record)
    put("harmonised/dataset_description.json", {})
    for scan in audit.plan["scans"]:
        if scan["status"] == "accepted":
            stem = f"harmonised/sub-{scan['subject']}/ses-base/pet/{scan['entities']}_desc-harmonised_pet"
            put(f"{stem}.json", audit.scan_records[scan["entities"]])
            (folder / "results" / f"{stem}.nii.gz").write_bytes(b"")


def test_loading_finds_every_record(tmp_path):
    audit = example_audit()
    write_records(tmp_path, audit)
    loaded = load_audit_input(tmp_path, audit.settings, audit.setups, audit.phantoms, audit.scans)
    assert sorted(loaded.harmonised_files) == sorted(audit.harmonised_files)
    assert replace(loaded, harmonised_files=()) == replace(audit, harmonised_files=())


def test_loading_lives_without_the_optional_records(tmp_path):
    audit = example_audit()
    (tmp_path / "results").mkdir()
    (tmp_path / "results" / "plan.json").write_text(json.dumps(audit.plan), encoding="utf-8")
    loaded = load_audit_input(tmp_path, audit.settings, audit.setups, audit.phantoms, audit.scans)
    assert len(sites_rows(loaded)) == len(PERIODS)
    assert {row["output"] for row in scans_rows(loaded)} == {""}


def test_an_outdated_achieved_record_is_not_used(tmp_path):
    audit = example_audit()
    write_records(tmp_path, replace(audit, achieved={**audit.achieved, ("F", "s1"): audit.achieved["A", "s1"]}))
    loaded = load_audit_input(tmp_path, audit.settings, audit.setups, audit.phantoms, audit.scans)
    assert sites(loaded)["F"]["achieved_in_plane_mm"] == ""


def test_a_missing_plan_is_one_clear_error(tmp_path):
    audit = example_audit()
    with pytest.raises(InputError, match=r"plan\.json"):
        load_audit_input(tmp_path, audit.settings, audit.setups, audit.phantoms, audit.scans)
