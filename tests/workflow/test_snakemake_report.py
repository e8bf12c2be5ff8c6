"""Snakemake's own report of a finished study: made without a network, with our captions and categories."""

import re
import subprocess

import pytest

import small_study as small

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
