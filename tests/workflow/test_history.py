"""The study's log and the statements about a run, on whole runs."""

import csv
import json
import shutil
import subprocess
import sys

import pytest

import small_study as small
from evenblur.study.history import entries, head, verify

pytestmark = pytest.mark.slow


def command(name, *arguments):
    """A step command by hand; its exit code and what it says."""
    call = [sys.executable, small.PROGRAM / "scripts" / name, *arguments]
    done = subprocess.run(call, capture_output=True, text=True, check=False, env=small.environment())
    assert "Traceback" not in done.stderr
    return done


def explain(study_dir):
    done = command("explain_run.py", study_dir)
    assert done.returncode == 0, done.stderr
    return done.stdout


def recorded(study_dir):
    return json.loads((study_dir / "results/audit/history.json").read_text())


def queries(study_dir):
    with (study_dir / "results/audit/queries.tsv").open(newline="") as stream:
        return {row["code"]: row["sentence"] for row in csv.DictReader(stream, delimiter="\t")}


def every_file(study_dir):
    return {p: p.read_bytes() for p in study_dir.rglob("*") if p.is_file() and ".snakemake" not in p.parts}


def test_the_first_run_has_one_line_an_item_and_the_audit_its_head(finished_study):
    history = finished_study / "history.tsv"
    found = entries(history)
    items = [entry.item for _, entry in found]
    # settings, program, target; three setups, phantoms and periods; five scans
    assert len(items) == len(set(items)) == 3 + 3 * 3 + 5
    assert {day for day, _ in found} == {small.DAY}
    assert verify(history) == []
    assert recorded(finished_study) == {**head(history), "problems": []}


def test_a_new_phantom_image_is_told_before_and_after_and_written_down(study):
    small.save(study / "images" / "quay-1.nii.gz", small.phantom_volume("quay-1", widen=0.5))
    before = every_file(study)
    foretold = "setup quay-1: phantom session p1 replaced; 2 scans may follow"
    assert f"Since {small.DAY}: {foretold}\n" in explain(study)
    assert every_file(study) == before
    lines = head(study / "history.tsv")["lines"]
    assert small.snakemake(study, "--dry-run").code == 0
    assert head(study / "history.tsv")["lines"] == lines

    assert small.snakemake(study, "plan").code == 0
    effect = "setup quay-1, phantom session p1: in-plane 5.0 -> 5.5 mm;"
    said = explain(study)
    assert "The plan that stands: target stays 8 mm; 2 scans to smooth\n" in said
    assert effect in said
    assert "2 scans to smooth again" in said

    run = small.snakemake(study)
    assert run.code == 0
    assert "This run: target stays 8 mm; 2 scans smoothed" in run.text
    assert effect in run.text
    statement = (study / ".evenblur/logs/changes.txt").read_text()
    assert foretold in statement
    assert effect in statement
    assert {entry.item for _, entry in entries(study / "history.tsv", after=lines)} == {
        "phantom quay-1-points",
        "period quay-1.p1",
        "scan sub-q01_ses-base",
        "scan sub-q02_ses-base",
    }
    assert explain(study) == f"Nothing changed since {small.DAY}.\n"


def test_a_decision_is_written_down_with_its_reason(study):
    rows = [[*row, "no" if row[0] == "m01" else "yes", "moved" if row[0] == "m01" else ""] for row in small.scan_rows()]
    small.write_table(study / "config" / "scans.tsv", f"{small.SCAN_COLUMNS} use use_reason", rows)
    assert "1 scan (sub-m01_ses-base) taken out of use (moved)" in explain(study)
    lines = head(study / "history.tsv")["lines"]
    run = small.snakemake(study)
    assert "This run: 1 scan now held (excluded_by_decision): sub-m01_ses-base" in run.text
    new = {entry.what: entry for _, entry in entries(study / "history.tsv", after=lines)}
    assert {"use", "use_reason", "status", "reasons", "output_sha256"} <= new.keys()
    assert {entry.reason for entry in new.values()} == {"moved"}
    assert (new["status"].old, new["status"].new) == ("accepted", "held")


def test_nothing_changed_adds_nothing_also_when_the_results_are_made_anew(study, finished_study):
    before = (study / "history.tsv").read_bytes()
    shutil.rmtree(study / "results")
    assert small.snakemake(study).code == 0
    assert (study / "history.tsv").read_bytes() == before
    assert small.result_bytes(study) == small.result_bytes(finished_study)


def drop_last(lines):
    return lines[:-1]


def change_a_digit(lines):
    return [line.replace("8.0", "8.1", 1) if line.split("\t")[1] == "target" else line for line in lines]


def drop_all(lines):
    return []


@pytest.mark.parametrize("tamper", [drop_last, change_a_digit, drop_all])
@pytest.mark.parametrize("hidden", [True, False], ids=["with own record", "results alone"])
def test_an_edited_history_is_told_once_and_stands_in_the_audit(study, tamper, hidden):
    history = study / "history.tsv"
    history.write_text("".join(tamper(history.read_text().splitlines(keepends=True))))
    if not hidden:
        (study / ".evenblur/history.json").unlink()
    assert "history.tsv" in explain(study).splitlines()[0]
    dry, real = small.snakemake(study, "--dry-run"), small.snakemake(study)
    assert dry.jobs == real.jobs == {small.HISTORY, small.TABLES, small.REPORT, small.PACK}
    assert [line for line in real.text.splitlines() if line.startswith("history.tsv")] != []
    assert recorded(study)["problems"]
    assert "history_altered" in queries(study)
    assert {key: recorded(study)[key] for key in ("lines", "sha256")} == head(history)
    assert small.snakemake(study).idle
    assert "history.tsv" not in explain(study)


def test_withdrawn_subjects_are_named_and_moved_aside_with_a_line(study):
    rows = [row for row in small.scan_rows() if row[0] != "q02"]
    small.write_table(study / "config" / "scans.tsv", small.SCAN_COLUMNS, rows)
    run = small.snakemake(study)
    harmonised = "results/harmonised/sub-q02/ses-base/pet/sub-q02_ses-base_desc-harmonised_pet"
    assert "1 scan taken out of the tables: sub-q02_ses-base" in run.text
    assert f"no row stands for {harmonised}.json" in run.text
    assert "stray_image" in queries(study)
    image = (study / f"{harmonised}.nii.gz").read_bytes()

    before = every_file(study)
    looked = command("tidy_study.py", study, "--dry-run")
    assert f"{harmonised}.nii.gz -> withdrawn/{harmonised}.nii.gz" in looked.stdout
    assert every_file(study) == before

    lines = head(study / "history.tsv")["lines"]
    assert command("tidy_study.py", study).returncode == 0
    assert (study / f"withdrawn/{harmonised}.nii.gz").read_bytes() == image
    assert not (study / "results/harmonised/sub-q02").exists()
    moved = [entry for _, entry in entries(study / "history.tsv", after=lines)]
    assert {entry.old for entry in moved} == {
        f"{harmonised}.nii.gz",
        f"{harmonised}.json",
        "results/intake/scans/sub-q02_ses-base.json",
    }
    dry, real = small.dry_and_real(study)
    assert dry == real == {small.TABLES, small.REPORT, small.PACK}
    assert "stray_image" not in queries(study)
    assert "history_altered" not in queries(study)
    assert verify(study / "history.tsv") == []
    assert command("tidy_study.py", study).stdout.startswith("Nothing to tidy")


def test_code_that_changes_smoothed_values_is_told_in_words(study, tmp_path):
    clone = small.copy_program(tmp_path / "clone")
    smoothing = clone / "scripts" / "evenblur" / "smoothing.py"
    smoothing.write_text(smoothing.read_text() + "\nA_NEW_CONSTANT = 1\n")
    run = small.snakemake(study, program=clone)
    assert f"Since {small.DAY}: smoothing code changed: all 5 scans are smoothed again" in run.text
    assert "target stays 8 mm; 5 scans smoothed" in run.text
