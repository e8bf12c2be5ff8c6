"""The Snakefile says what the workflow is: its picture names the rules that there are, its linter is content."""

import re
import shutil

import pytest

import small_study as small

pytestmark = pytest.mark.slow

TARGETS = {"all", "check", "plan", "harmonise", "audit", "handover"}


def rules_of(study_dir):
    listed = small.snakemake(study_dir, "--list-rules")
    assert listed.code == 0, listed.text
    return set(re.findall(r"^([a-z_]+)$", listed.text, flags=re.MULTILINE))


def test_the_picture_names_every_rule_and_no_other(tmp_path):
    shutil.copytree(small.PROGRAM / "config", tmp_path / "config")
    settings = tmp_path / "config" / "study.yaml"
    settings.write_text(settings.read_text().replace("kernel: quadrature", "kernel: matched"))
    picture = (small.PROGRAM / "Snakefile").read_text().split('"""')[1]
    drawn = set(re.findall(r"\b(?:take|make|measure|gather|match|price|smooth|describe|record)_[a-z_]+", picture))
    assert rules_of(tmp_path) - TARGETS == drawn


@pytest.mark.parametrize("target", sorted(TARGETS - {"all"}))
def test_each_target_can_be_asked_for_by_name(study, target):
    run = small.snakemake(study, "--dry-run", target)
    assert run.code == 0, run.text
    assert not {job for job in run.jobs if job.startswith("Smooth")}


def test_a_broken_study_is_refused_in_plain_lines_before_any_work(study):
    table = study / "config" / "scans.tsv"
    table.write_text(table.read_text().replace("quay-1", "qay-1").replace("2026-02-01", "1.2.2026", 1))
    run = small.snakemake(study)
    assert run.code == 2
    assert "did you mean `quay-1`?" in run.text
    assert "year-month-day" in run.text
    assert "Traceback" not in run.text
    assert not run.jobs
