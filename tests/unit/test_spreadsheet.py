r"""The tables for spreadsheets: no cell starts a formula, and the table can be had back letter by letter.

Signs that start a formula: OWASP, CSV Injection (= + - @, tab, carriage return, line feed, full-width forms).
"""

import csv
import io

import pytest
from hypothesis import given
from hypothesis import strategies as st

from audit_example import example_audit
from evenblur.audit.spreadsheet import guarded, read_spreadsheet, spreadsheet_text, unguarded
from evenblur.audit.tables import SCANS_COLUMNS, SITES_COLUMNS, one_line, scans_rows, sites_rows

STARTS = ("=", "+", "-", "@", "\t", "\r", "\n", "\uff1d", "\uff0b", "\uff0d", "\uff20")
WORDS = st.text(st.sampled_from("=+-@'\",;\t\r\n ab1\uff1d\u00e9"), max_size=8)


@pytest.mark.parametrize("start", STARTS)
def test_a_formula_is_written_as_text(start):
    assert guarded(f"{start}1+1|' /C calc'!A0") == f"'{start}1+1|' /C calc'!A0"


@given(st.text(max_size=12) | WORDS)
def test_guarding_can_be_undone_and_leaves_no_start(text):
    assert unguarded(guarded(text)) == text
    assert not guarded(text).startswith(STARTS)


@given(st.lists(st.fixed_dictionaries({"a": WORDS, "b": WORDS}), max_size=4))
def test_a_table_comes_back_as_it_was(rows):
    text = spreadsheet_text(["a", "b"], rows)
    assert read_spreadsheet(text) == [{key: one_line(value) for key, value in row.items()} for row in rows]
    plain = list(csv.reader(io.StringIO(text, newline="")))  # as any reader of CSV sees it
    assert len(plain) == len(rows) + 1
    assert not [one for line in plain for one in line if one.startswith(STARTS)]


def test_lines_are_those_of_rfc_4180():
    text = spreadsheet_text(["a", "b"], [{"a": 'say "x", y', "b": None}])
    assert text == '"a","b"\r\n"say ""x"", y",""\r\n'


@pytest.mark.parametrize(("columns", "rows"), [(SITES_COLUMNS, sites_rows), (SCANS_COLUMNS, scans_rows)])
def test_the_audits_tables_hold_what_their_tab_separated_twins_hold(columns, rows):
    lines = rows(example_audit())
    lines[0] = {**lines[0], "setup": "=cmd", "flags": "-1"}
    found = read_spreadsheet(spreadsheet_text(columns, lines))
    assert found == [{column: one_line(row[column]) for column in columns} for row in lines]
    assert list(found[0]) == list(columns)
