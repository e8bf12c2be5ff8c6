r"""The audit's tables for spreadsheets: comma separated, and no cell that a spreadsheet takes for a formula.

The file is RFC 4180: commas, every cell in quotation marks (a quotation mark inside is doubled), lines end with `\r\n`,
UTF-8 without a mark in front. A cell that begins with one of = + - @, a tab, a line end, the full-width forms of the
signs, or an apostrophe gets one apostrophe in front (after OWASP, CSV Injection). Taking one apostrophe off each cell
that begins with one gives the table back, letter by letter: an apostrophe of the cell's own was doubled.

A negative number begins with - as well and is written as text; the tab-separated table has it as a number.
"""

import csv
import io
from collections.abc import Iterable, Mapping, Sequence
from typing import Any

from evenblur.audit.tables import one_line

FORMULA_STARTS = tuple("=+-@\t\r\n＝＋－＠")
"""What a spreadsheet may take for the start of a formula, in narrow and full-width letters."""

_SIGN = "'"


def guarded(text: str) -> str:
    """A cell that no spreadsheet runs.

    >>> guarded("=1+1"), guarded("4.25"), guarded("'quoted'")
    ("'=1+1", '4.25', "''quoted'")
    """
    return _SIGN + text if text.startswith((*FORMULA_STARTS, _SIGN)) else text


def unguarded(text: str) -> str:
    """The cell as it was before `guarded`.

    >>> unguarded(guarded("-3")), unguarded(guarded("'x")), unguarded("y")
    ('-3', "'x", 'y')
    """
    return text.removeprefix(_SIGN)


def spreadsheet_text(columns: Sequence[str], rows: Iterable[Mapping[str, Any]]) -> str:
    r"""A table as text for a spreadsheet.

    Raises
    ------
    KeyError
        If a row lacks a column.

    >>> spreadsheet_text(["a", "b"], [{"a": "@x", "b": None}])
    '"a","b"\r\n"\'@x",""\r\n'
    """
    stream = io.StringIO(newline="")
    writer = csv.writer(stream, quoting=csv.QUOTE_ALL, lineterminator="\r\n")
    writer.writerow(columns)
    writer.writerows([[guarded(one_line(row[column])) for column in columns] for row in rows])
    return stream.getvalue()


def read_spreadsheet(text: str) -> list[dict[str, str]]:
    """The rows of `spreadsheet_text`, as they were.

    >>> read_spreadsheet(spreadsheet_text(["a"], [{"a": "=1"}]))
    [{'a': '=1'}]
    """
    columns, *rows = csv.reader(io.StringIO(text, newline=""))
    return [dict(zip(columns, map(unguarded, row), strict=True)) for row in rows]
