"""The invented BIDS example: valid by a BIDS validator, the same bytes each time, with the gaps that it is made for."""

import csv
import json
import os
import subprocess
from pathlib import Path

import bids_validator_deno
import pytest
from deno import find_deno_bin

import make_example_bids
import new_study
from evenblur.command import run
from evenblur.study.problems import StudyError
from evenblur.study.reading import load_study

VALIDATOR = Path(bids_validator_deno.__file__).with_name("bids-validator.js")


@pytest.fixture(scope="module")
def example(tmp_path_factory):
    folder = tmp_path_factory.mktemp("pool") / "bids"
    assert run(make_example_bids.main, [str(folder)]) == 0
    return folder


def test_the_example_is_valid_bids(example, tmp_path):
    # BIDS 1.11.1 (schema 1.2.7) as bids-validator-deno 3.0.2 checks it, without a network.
    command = [find_deno_bin(), "run", "--no-remote", "--no-prompt", "--allow-read", "--allow-env", "--deny-net"]
    environment = {**os.environ, "DENO_DIR": str(tmp_path), "DENO_NO_UPDATE_CHECK": "1", "NO_COLOR": "1"}
    done = subprocess.run(
        [*command, VALIDATOR, example, "--format", "json"],
        capture_output=True,
        text=True,
        check=False,
        timeout=300,
        env=environment,
    )
    assert done.stdout.startswith("{"), done.stdout + done.stderr
    issues = json.loads(done.stdout)["issues"]["issues"]
    assert {(issue["code"], issue.get("location", "")) for issue in issues if issue["severity"] == "error"} == set()


def test_the_example_is_the_same_at_each_run(example, tmp_path):
    make_example_bids.main([str(tmp_path / "again")])
    once, again = (
        {path.relative_to(folder): path.read_bytes() for path in folder.rglob("*") if path.is_file()}
        for folder in (example, tmp_path / "again")
    )
    assert once == again


def test_a_study_of_the_example_lacks_the_phantoms_kind_and_one_day_only(example, tmp_path):
    study = tmp_path / "study"
    assert run(new_study.main, [str(study), "--from-bids", str(example)]) == 0
    with pytest.raises(StudyError) as stopped:
        load_study(study)
    found = [(problem.file, problem.column) for problem in stopped.value.problems]
    assert found == [("config/phantoms.tsv", "kind")] * 3 + [("config/scans.tsv", "acquired")]
    with (study / "config" / "setups.tsv").open(encoding="utf-8", newline="") as stream:
        assert [row["setup"] for row in csv.DictReader(stream, delimiter="\t")] == ["fern-1", "mill-1", "quay-1"]


def test_nothing_is_overwritten(example, capsys):
    assert run(make_example_bids.main, [str(example)]) == 2
    assert "never overwritten" in capsys.readouterr().err
