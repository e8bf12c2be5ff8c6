"""The fixture that records the checks of this folder and compares them with the table."""

import json
import os
from collections.abc import Iterator
from dataclasses import asdict
from pathlib import Path

import pytest

from reference_checks import TABLE, Recorder, differences, table_checks

WRITE = "EVENBLUR_REFERENCE_CHECKS"
"""Names a file to which checks are appended, one JSON object a line, instead of being compared with the table."""


@pytest.fixture
def check(request: pytest.FixtureRequest) -> Iterator[Recorder]:
    """Records this test's checks; afterwards they must be the rows that the table has for this test."""
    recorder = Recorder(f"{Path(request.node.path).stem}::{request.node.name}")
    yield recorder
    into = os.environ.get(WRITE)
    if into:
        with Path(into).open("a", encoding="utf-8") as file:
            file.writelines(json.dumps(asdict(made)) + "\n" for made in recorder.checks)
        return
    rows = [row for row in table_checks(TABLE.read_text(encoding="utf-8")) if row.test == recorder.test]
    assert differences(recorder.checks, rows) == [], "write the table again: python tests/reference/write_table.py"
