"""The audit as data: audit.json agrees with the tables, and its published schema holds it and nothing else."""

import copy
import csv
import io
import json
from dataclasses import replace
from math import sqrt
from pathlib import Path
from statistics import median

import jsonschema
import pytest

from audit_example import PERIODS, VERDICTS, example_audit
from evenblur.audit.facts import audit_record, history_head
from evenblur.audit.periods import periods_of
from evenblur.audit.site_records import read_audit, site_records
from evenblur.audit.standing_out import FAR_OFF, robust_scores, standing_out
from evenblur.audit.tables import SCANS_COLUMNS, SITES_COLUMNS, scans_rows, sites_rows, table_text
from evenblur.command import write_record
from evenblur.errors import InputError

SCHEMAS = Path(__file__).resolve().parents[2] / "workflow" / "schemas"


def schema(name):
    return json.loads((SCHEMAS / f"{name}.schema.json").read_text(encoding="utf-8"))


def written(record):
    """The record as it stands in its file."""
    return json.loads(json.dumps(record.model_dump(mode="json")))


@pytest.fixture(scope="module")
def data():
    return written(audit_record(example_audit(), history={"lines": 3, "sha256": "ab" * 32}))


@pytest.fixture
def changed(data):
    return copy.deepcopy(data)


def read(text):
    return list(csv.DictReader(io.StringIO(text), delimiter="\t", quoting=csv.QUOTE_NONE))


@pytest.mark.parametrize(
    ("name", "columns", "rows"), [("periods", SITES_COLUMNS, sites_rows), ("scans", SCANS_COLUMNS, scans_rows)]
)
def test_every_cell_of_the_tables_stands_in_the_data_with_its_type(data, name, columns, rows):
    lines = read(table_text(columns, rows(example_audit())))
    assert len(lines) == len(data[name]) > 0
    for line, entry in zip(lines, data[name], strict=True):
        assert set(columns) <= set(entry)
        for column in columns:
            value, cell = entry[column], line[column]
            if value is None or value in ([], ""):
                assert cell == "", column
            elif isinstance(value, list):
                assert value == [type(value[0])(part) for part in cell.split(";")], column
            elif isinstance(value, float):
                assert value == float(cell), column
            else:
                assert str(value) == cell, column


def test_the_summary_counts_what_the_lists_hold(data):
    summary = data["summary"]
    assert summary["periods"] == len(data["periods"]) == len(PERIODS)
    assert summary["periods_passing"] == sum(word == "pass" for word in VERDICTS.values())
    statuses = [scan["status"] for scan in data["scans"]]
    assert (summary["scans_accepted"], summary["scans_held"]) == (statuses.count("accepted"), statuses.count("held"))
    assert summary["clean"]


def test_the_head_of_the_change_log_is_copied(tmp_path, data):
    assert data["history"] == {"lines": 3, "sha256": "ab" * 32}
    assert history_head(tmp_path) is None
    assert written(audit_record(example_audit()))["history"] is None
    (tmp_path / "audit").mkdir()
    write_record(tmp_path / "audit" / "history.json", {"lines": 7, "sha256": "cd" * 32})
    assert history_head(tmp_path) == {"lines": 7, "sha256": "cd" * 32}


def test_a_periods_noise_factor_is_the_root_of_its_scans_median_variance_factor():
    audit = example_audit()
    records = {
        name: {**record, "Evenblur": {**record["Evenblur"], "noise_variance_factor": 0.04 + 0.01 * number}}
        for number, (name, record) in enumerate(audit.scan_records.items())
    }
    found = {period.setup: period.noise_factor for period in audit_record(replace(audit, scan_records=records)).periods}
    mine = [
        sqrt(record["Evenblur"]["noise_variance_factor"])
        for name, record in records.items()
        if name.startswith("sub-b")
    ]
    assert found["B"] == pytest.approx(median(mine), abs=5e-5)  # four decimals
    assert found["F"] is None  # held: nothing was smoothed


# The published schema


def test_the_schema_is_a_schema_and_holds_the_audit(data):
    jsonschema.Draft202012Validator.check_schema(schema("audit"))
    jsonschema.validate(data, schema("audit"))
    jsonschema.validate(written(audit_record(example_audit())), schema("audit"))


def test_the_schema_holds_every_sites_record():
    audit = example_audit()
    jsonschema.Draft202012Validator.check_schema(schema("site"))
    records = site_records(audit_record(audit), audit)
    assert len(records) == len(PERIODS)
    for record in records.values():
        jsonschema.validate(written(record), schema("site"))


SPOILT = {
    "a key is missing": lambda data: data.pop("target"),
    "an unknown key": lambda data: data.update(extra=1),
    "an unknown key of a period": lambda data: data["periods"][0].update(extra=1),
    "a number as text": lambda data: data["periods"][0].update(measured_in_plane_mm="5.2"),
    "an unknown verdict": lambda data: data["periods"][0].update(verdict="fine"),
    "an unknown status": lambda data: data["scans"][0].update(status="maybe"),
    "a short hash": lambda data: data["scans"][0].update(input_sha256="ab12"),
    "a hash in capitals": lambda data: data["history"].update(sha256="AB" * 32),
    "a negative count": lambda data: data["summary"].update(scans_held=-1),
    "another format": lambda data: data.update(format="evenblur-audit-0"),
    "a missing width's key": lambda data: data["periods"][0].pop("achieved_axial_mm"),
}


@pytest.mark.parametrize("spoil", SPOILT.values(), ids=SPOILT)
def test_the_schema_and_the_reader_refuse_what_is_no_audit(changed, tmp_path, spoil):
    spoil(changed)
    with pytest.raises(jsonschema.ValidationError):
        jsonschema.validate(changed, schema("audit"))
    write_record(tmp_path / "audit.json", changed)
    with pytest.raises(InputError, match=r"audit\.json"):
        read_audit(tmp_path / "audit.json")


def test_what_was_written_is_read_back(tmp_path, data):
    write_record(tmp_path / "audit.json", data)
    assert written(read_audit(tmp_path / "audit.json")) == data


# What stands out


def test_robust_scores_follow_their_formula():
    values = dict(zip("abcdefg", (5.0, 5.5, 6.0, 6.2, 6.4, 7.0, 12.0), strict=True))
    # By hand: median 6.2; deviations 1.2 .7 .2 0 .2 .8 5.8, their median .7; 0.6745 * 5.8 / 0.7.
    assert robust_scores(values)["g"] == pytest.approx(0.6745 * 5.8 / 0.7)
    assert robust_scores(values)["d"] == 0.0
    assert robust_scores({"a": 1.0, "b": 9.0}) == {}  # nobody stands out among two
    # Widths that are alike to a hundredth do not make one that is a tenth off an outlier.
    alike = dict(zip("abcde", (6.0, 6.0, 6.0, 6.01, 6.1), strict=True))
    assert all(abs(score) < FAR_OFF for score in robust_scores(alike).values())


def test_a_width_far_from_the_others_stands_out_and_one_among_them_does_not():
    audit = example_audit()
    periods = [
        {**entry, "measured": {**entry["measured"], "in_plane_mm": 19.0}} if entry["setup"] == "F" else entry
        for entry in audit.plan["periods"]
    ]
    found = standing_out(periods_of(replace(audit, plan={**audit.plan, "periods": periods})), tolerance_mm=0.3)
    assert any("in-plane width 19.00 mm, far above the others" in text for text in found["F.s1"])
    usual = standing_out(periods_of(audit), tolerance_mm=0.3)
    assert not any("far" in text for texts in usual.values() for text in texts)


def test_an_achieved_width_over_half_the_tolerance_off_stands_out():
    found = standing_out(periods_of(example_audit()), tolerance_mm=0.3)
    assert any("axial achieved 6.83 mm" in text for text in found["B.s1"])  # the target is 7 mm
    assert not any("achieved" in text for text in found["A.s1"])  # 7.02 and 6.97 mm
