"""The demonstration's sidecars say what the setups table says."""

import csv
from pathlib import Path

from evenblur.demonstration import scenario

SETUPS = Path(__file__).parents[2] / "config" / "setups.tsv"


def test_sidecars_state_the_reconstruction_that_the_setups_table_names() -> None:
    with SETUPS.open(encoding="utf-8", newline="") as stream:
        rows = {row["setup"]: row for row in csv.DictReader(stream, delimiter="\t")}
    assert set(rows) - set(scenario.RECONSTRUCTIONS) == {"mill-1"}
    for setup, reconstruction in scenario.RECONSTRUCTIONS.items():
        words = rows[setup]["reconstruction"]
        assert reconstruction.model == rows[setup]["scanner"]
        assert words.startswith(reconstruction.method)
        filtered = f"{reconstruction.filter_mm:g} mm filter"
        assert filtered in words if reconstruction.filter_mm else "no filter" in words
        named = dict(reconstruction.parameters)
        assert "iterations," not in words or f"{named['iterations']} iterations," in words
