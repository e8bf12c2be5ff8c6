"""Snakemake's own report of a finished study: made without a network, with our captions and categories."""

import re
import subprocess

import pytest

import small_study as small
from evenblur.study.audit_tasks import audit_files
from evenblur.study.ledger import Ledger
from evenblur.study.reading import load_study
from evenblur.study.tasks import Tasks

pytestmark = pytest.mark.slow


def make_report(study_dir, name, monkeypatch):
    for proxy in ("http_proxy", "https_proxy", "HTTP_PROXY", "HTTPS_PROXY"):
        monkeypatch.setenv(proxy, "http://127.0.0.1:9")  # nobody listens there
    plain = small.command(study_dir, "--report", str(study_dir / name))
    return subprocess.run(plain, capture_output=True, text=True, timeout=300, check=False)


def test_the_report_holds_the_audit_with_captions_and_categories(study, monkeypatch):
    done = make_report(study, "out.html", monkeypatch)
    assert done.returncode == 0, done.stderr
    text = (study / "out.html").read_text(encoding="utf-8")
    assert "Records of the sites" in text
    # The caption restates the tolerance that was used: the default of 0.3 mm.
    assert "may differ from the target by 0.3 mm" in text
    for name in ("sites.tsv", "scans.tsv", "queries.tsv", "report.html", "quay.html", "mill.json"):
        assert name in text, name
    loaded = re.findall(r'<(?:script|link|img)[^>]*(?:src|href)="(https?:[^"]*)"', text)
    assert loaded == []


def test_the_report_can_be_a_zip_file_too(study, monkeypatch):
    done = make_report(study, "out.zip", monkeypatch)
    assert done.returncode == 0, done.stderr
    assert (study / "out.zip").read_bytes()[:2] == b"PK"


def test_every_file_of_the_audit_is_named_before_the_run_and_no_other_is_there(study):
    tasks = Tasks(load_study(study), Ledger(study, look=False), study, small.PROGRAM)
    folder = study / "results" / "audit"
    found = {path.relative_to(study).as_posix() for path in folder.rglob("*") if path.is_file()}
    assert found - {"results/audit/history.json"} == set(audit_files(tasks))
    assert {f"results/audit/sites/{site}.html" for site in ("quay", "mill", "moor")} <= found
