"""What the steps of the audit depend on, besides what `tasks.py` says of every step."""

import hashlib
import json
from pathlib import Path

from evenblur.study.pictured import pictured_scans
from evenblur.study.tasks import Settings, Tasks

TABLES = ("sites.tsv", "scans.tsv", "queries.tsv", "covariates.tsv", "sites.csv", "scans.csv", "audit.json")
"""What the audit's tables step writes."""

_WORDING = {".j2", ".css", ".js"}  # captions (.rst) are Snakemake's own report's, not the page's


def pictured(tasks: Tasks, plan_file: str) -> list[str]:
    """Entities of the scans whose pictures the report shows."""
    plan = tasks.plan(plan_file)
    site_of = {row.setup: row.site for row in tasks.study.setups}
    return [key for key in pictured_scans(plan["scans"], site_of) if key in tasks.scans]


def pictured_scan_images(tasks: Tasks, plan_file: str) -> list[str]:
    """Images of the scans whose pictures the report shows, as they came."""
    return [name for key in pictured(tasks, plan_file) for name in tasks.image(tasks.scans[key].image)]


def pictured_harmonised(tasks: Tasks, plan_file: str) -> list[str]:
    """Harmonised images of the scans whose pictures the report shows."""
    return [tasks.layout.harmonised_image(tasks.scans[key]) for key in pictured(tasks, plan_file)]


def pictured_records(tasks: Tasks, plan_file: str) -> list[str]:
    """Records of the harmonised images whose pictures the report shows."""
    return [tasks.layout.scan_record(tasks.scans[key]) for key in pictured(tasks, plan_file)]


def pictures_settings(tasks: Tasks, plan_file: str) -> Settings:
    """Settings of the pictures: which scans, from which images, smoothed how."""
    return {
        "code": tasks.code("make_pictures.py"),
        "scans": json.dumps([tasks.smoothing_settings(key, plan_file) for key in pictured(tasks, plan_file)]),
    }


def report_settings(tasks: Tasks, plan_file: str, layout: Path) -> Settings:
    """Settings of the report and the site records: their wording and layout besides what the tables depend on.

    Parameters
    ----------
    tasks
        The study's steps.
    plan_file
        The plan.
    layout
        Folder of the pages' templates, style and script.
    """
    pages = "".join(_digest(path) for path in sorted(layout.iterdir()) if path.suffix in _WORDING)
    return {
        **tasks.audit_settings(plan_file),
        "code": tasks.code("make_report.py"),
        "layout": hashlib.sha256(pages.encode()).hexdigest(),
    }


def site_files(tasks: Tasks) -> list[str]:
    """Each site's own record: page and data, in the order of the table of setups."""
    sites = dict.fromkeys(row.site for row in tasks.study.setups)
    return [tasks.layout.audit(f"sites/{site}{ending}") for site in sites for ending in (".html", ".json")]


def audit_files(tasks: Tasks) -> list[str]:
    """Every file of the audit that a rule makes: tables, pictures, report, site records."""
    names = [tasks.layout.audit(name) for name in (*TABLES, "pictures.json", "report.html")]
    return [*names, *site_files(tasks)]


def _digest(path: Path) -> str:
    return hashlib.sha256(path.read_bytes()).hexdigest()
