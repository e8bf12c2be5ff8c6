"""The table of this folder: it has all tests' rows and no others, and differences would be noticed."""

import ast
from dataclasses import replace

import pytest

from reference_checks import FOLDER, TABLE, TITLES, Check, Recorder, differences, table_checks, table_text


def recording_tests():
    """module::function of every test here that records checks."""
    found = set()
    for path in sorted(FOLDER.glob("test_*.py")):
        for node in ast.parse(path.read_text(encoding="utf-8")).body:
            if isinstance(node, ast.FunctionDef) and node.name.startswith("test_"):
                names = [argument.arg for argument in node.args.args]
                if "check" in names and path.stem != "test_table":
                    found.add(f"{path.stem}::{node.name}")
    return found


def test_every_test_has_its_rows_and_every_row_its_test():
    rows = table_checks(TABLE.read_text(encoding="utf-8"))
    assert {row.test.partition("[")[0] for row in rows} == recording_tests()
    assert {row.test.partition("::")[0] for row in rows} == set(TITLES)
    assert len({row.name for row in rows}) == len(rows)


def test_every_row_names_its_source():
    for row in table_checks(TABLE.read_text(encoding="utf-8")):
        assert len(row.source) > 5, row.name


EXAMPLE = Check("width", "closed form", "5.00 mm (within 0.1)", "5.02 mm", "test_trade_facts::test_x", 0.1)


def test_table_is_read_back_as_it_was_written():
    other = replace(EXAMPLE, name="second", test="test_gaussian_facts::test_y")
    read = table_checks(table_text([EXAMPLE, other]))
    assert [replace(row, steady=0.1) for row in read] == [other, EXAMPLE]


@pytest.mark.parametrize(
    ("row", "said"),
    [
        (replace(EXAMPLE, found="5.30 mm"), "apart"),
        (replace(EXAMPLE, found="5.02 m"), "in the table"),
        (replace(EXAMPLE, expected="5.10 mm (within 0.1)"), "expected"),
        (replace(EXAMPLE, source="nowhere"), "source"),
        (replace(EXAMPLE, name="breadth"), "not in the table"),
    ],
)
def test_a_row_that_says_something_else_is_noticed(row, said):
    assert differences([EXAMPLE], [replace(EXAMPLE, found="5.07 mm")]) == []
    assert any(said in line for line in differences([EXAMPLE], [row]))


def test_a_check_that_does_not_hold_fails():
    recorder = Recorder("test_table::test")
    recorder.close("a", source="none needed", expected=1.0, found=1.05, within=0.1)
    with pytest.raises(AssertionError, match="expected"):
        recorder.close("b", source="none needed", expected=[1.0, 2.0], found=[1.0, 2.2], within=0.1)
    with pytest.raises(AssertionError, match="values"):
        recorder.close("c", source="none needed", expected=[1.0, 2.0], found=[1.0], within=0.1)
    with pytest.raises(AssertionError, match="expected"):
        recorder.inside("d", source="none needed", low=0.2, high=0.3, found=0.31)
    with pytest.raises(AssertionError, match="expected"):
        recorder.holds("e", source="none needed", expected="so", found="not so", true=False)
    with pytest.raises(AssertionError, match="source"):
        recorder.shown("f", source="", expected="so", found="so")
