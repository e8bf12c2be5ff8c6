"""Checks against what this project did not write: how one is recorded, compared, and shown in a table.

A check has a name, a source, an expected value and a found one. The table (tests/reference/README.md) is written from
a run; every later run compares its own checks with the table's rows.
"""

import re
from collections.abc import Sequence
from dataclasses import dataclass
from itertools import groupby
from pathlib import Path

Value = float | Sequence[float]

NO_SOURCE = "common practice, no source"
CLOSED_FORM = "closed form, worked out in the test"

FOLDER = Path(__file__).resolve().parent / "reference"
TABLE = FOLDER / "README.md"


@dataclass(frozen=True)
class Check:
    """One row: `steady` is how far a later run's found values may lie from the table's."""

    name: str
    source: str
    expected: str
    found: str
    test: str
    steady: float = 0.0


def written(values: Sequence[float], digits: int) -> str:
    """Numbers as the table shows them."""
    # Adding zero takes the sign off a rounded zero.
    return ", ".join(f"{round(float(value), digits) + 0.0:.{digits}f}" for value in values)


def numbers(text: str) -> list[float]:
    """The numbers in a cell; a sign counts only where a number starts."""
    return [float(found) for found in re.findall(r"(?<![\w.])[-−]?\d+(?:\.\d+)?(?:e-?\d+)?", text.replace("−", "-"))]


class Recorder:
    """Collects the checks of one test, each asserted as it is recorded."""

    def __init__(self, test: str) -> None:
        self.test = test
        self.checks: list[Check] = []

    def close(
        self, name: str, *, source: str, expected: Value, found: Value, within: float, digits: int = 4, unit: str = ""
    ) -> None:
        """Each found value lies within `within` of its expected one."""
        wanted, got = _listed(expected), _listed(found)
        assert len(wanted) == len(got), f"{name}: {len(wanted)} values expected, {len(got)} found"
        text = f"{written(wanted, digits)}{_unit(unit)} (within {within:g})"
        self._add(name, source, text, f"{written(got, digits)}{_unit(unit)}", within + 10.0**-digits)
        worst = max(abs(a - b) for a, b in zip(wanted, got, strict=True))
        assert worst <= within, f"{name}: expected {text}, found {written(got, digits + 2)}"

    def inside(
        self,
        name: str,
        *,
        source: str,
        low: Value,
        high: Value,
        found: Value,
        digits: int = 4,
        unit: str = "",
        steady: float | None = None,
    ) -> None:
        """Each found value lies between its limits, which count as inside."""
        lows, highs, got = _listed(low), _listed(high), _listed(found)
        assert len(lows) == len(highs) == len(got), f"{name}: {len(lows)} limits, {len(got)} values found"
        pairs = [f"{a:.{digits}f} to {b:.{digits}f}" for a, b in zip(lows, highs, strict=True)]
        text = ", ".join(pairs) + _unit(unit)
        allowed = min(b - a for a, b in zip(lows, highs, strict=True)) / 2 if steady is None else steady
        self._add(name, source, text, f"{written(got, digits)}{_unit(unit)}", allowed + 10.0**-digits)
        good = all(a <= value <= b for a, value, b in zip(lows, got, highs, strict=True))
        assert good, f"{name}: expected {text}, found {written(got, digits + 2)}"

    def holds(self, name: str, *, source: str, expected: str, found: str, true: bool) -> None:
        """A statement in words holds."""
        self._add(name, source, expected, found, 0.0)
        assert true, f"{name}: expected {expected}, found {found}"

    def shown(self, name: str, *, source: str, expected: str, found: str) -> None:
        """A published number beside ours, for the reader's judgement: nothing is asserted."""
        self._add(name, source, f"not asserted: {expected}", found, 0.01)

    def _add(self, name: str, source: str, expected: str, found: str, steady: float) -> None:
        assert source, f"{name}: a check names its source, or says that it has none"
        self.checks.append(Check(name, source, expected, found, self.test, steady))


def _listed(value: Value) -> list[float]:
    return [float(entry) for entry in value] if isinstance(value, Sequence) or hasattr(value, "__iter__") else [value]


def _unit(unit: str) -> str:
    return f" {unit}" if unit else ""


def differences(run: Sequence[Check], table: Sequence[Check]) -> list[str]:
    """What a run's checks and the table's rows of the same tests say differently."""
    rows, made = {row.name: row for row in table}, {check.name: check for check in run}
    found = [f"{name}: in the table only" for name in rows if name not in made]
    found += [f"{name}: not in the table" for name in made if name not in rows]
    if len(made) < len(run):
        found.append("two checks have one name")
    for name, check in made.items():
        row = rows.get(name)
        if row is None:
            continue
        found += [
            f"{name}: {what} is {ours!r}, in the table {theirs!r}"
            for what, ours, theirs in (
                ("source", check.source, row.source),
                ("expected", check.expected, row.expected),
                ("test", check.test, row.test),
            )
            if ours != theirs
        ]
        ours, theirs = numbers(check.found), numbers(row.found)
        words = [re.sub(r"[-−]?\d[\d.]*", "", text) for text in (check.found, row.found)]
        if words[0] != words[1] or len(ours) != len(theirs):
            found.append(f"{name}: found {check.found!r}, in the table {row.found!r}")
        elif any(abs(a - b) > check.steady for a, b in zip(ours, theirs, strict=True)):
            found.append(f"{name}: found {check.found!r}, in the table {row.found!r}, more than {check.steady:g} apart")
    return found


INTRODUCTION = """# Checks against what this project did not write

Written by `.venv/bin/python tests/reference/write_table.py` from a run of this folder; every run compares itself
with it. Sources: a citation; a closed form that the test works out; *common practice, no source*; *from memory* where a
published number was recalled and its text not seen. Rows that say *not asserted* set a published number beside ours.
"""

TITLES = {
    "test_gaussian_facts": "Gaussian facts",
    "test_sphere_recovery": "Recovery at the centre of spheres, discs and slabs",
    "test_recovery_bands": "Published recovery bands",
    "test_point_responses": "Point responses read the NEMA NU 2 way",
    "test_cylinder_geometry": "Tilted cylinders and curved edges",
    "test_published_pairs": "Published widths with and without an added filter",
    "test_tailed_spreads": "Point spreads with tails",
    "test_trade_facts": "Facts of the trade",
    "test_general_libraries": "General libraries as oracles",
    "test_noise_smoothness": "Smoothness of noise",
    "test_bids_standard": "The BIDS standard",
    "test_bags": "Bags for the auditor",
    "test_open_anatomy": "Open anatomy",
}


def table_text(checks: Sequence[Check]) -> str:
    """The whole README, from checks in the order of their tests."""
    order = list(TITLES)
    parts = [INTRODUCTION]
    ordered = sorted(checks, key=lambda check: order.index(_module(check)))
    for module, rows in groupby(ordered, key=_module):
        parts += [f"## {TITLES[module]}\n", "| Check | Source | Expected | Found | Test |", "|---|---|---|---|---|"]
        parts += [f"| {r.name} | {r.source} | {r.expected} | {r.found} | `{r.test}` |" for r in rows]
        parts[-1] += "\n"
    return "\n".join(parts).rstrip("\n") + "\n"


def table_checks(text: str) -> list[Check]:
    """The rows of a README, as checks."""
    rows = []
    for line in text.splitlines():
        cells = [cell.strip() for cell in line.strip("|").split(" | ")]
        if line.startswith("| ") and len(cells) == 5 and cells[0] != "Check":
            rows.append(Check(*cells[:4], cells[4].strip("`")))
    return rows


def _module(check: Check) -> str:
    return check.test.partition("::")[0]
