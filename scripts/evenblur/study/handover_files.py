"""What the bag for the auditor is made from, and the settings that decide whether it still holds."""

import hashlib
import json
from pathlib import Path
from typing import Any

from evenblur.code_identity import code_token
from evenblur.study.audit_tasks import TABLES, pictures_settings, report_settings
from evenblur.study.decision_tasks import region_settings, regional_scans, site_effect_settings
from evenblur.study.reading import Study
from evenblur.study.records import Layout
from evenblur.study.tasks import Tasks

_GROWING = (".html", ".csv", "scans.tsv", "queries.tsv", "covariates.tsv", "audit.json")
"""Ends of the names of files that grow with the study: Snakemake compares the contents of small files only."""


def audit_files(study: Study) -> list[str]:
    """Files of the audit that the bag holds, relative to the study folder."""
    layout = Layout(study)
    sites = dict.fromkeys(row.site for row in study.setups)
    own = [f"sites/{site}{ending}" for site in sites for ending in (".html", ".json")]
    return [layout.audit(name) for name in (*TABLES, "history.json", "report.html", *own)]


def decision_files(study: Study) -> list[str]:
    """What each target costs and what differs between sites, relative to the study folder."""
    layout = Layout(study)
    return [layout.prices("tsv"), layout.prices("html"), layout.site_effect]


def small_audit_files(study: Study) -> list[str]:
    """Files of the audit that stay small, at least one of every step that makes some."""
    return [name for name in audit_files(study) if not name.endswith(_GROWING)]


def growing_audit_files(study: Study) -> list[str]:
    """Files of the audit that grow with the study."""
    return [name for name in audit_files(study) if name.endswith(_GROWING)]


def handover_records(tasks: Tasks, plan_file: str) -> list[str]:
    """Records that the bag waits for, besides the plan, the draft plan and the matching records.

    Those of single scans are packed too. They are older than the audit and the comparison of the sites, which are made
    from them and which the bag waits for; thousands of inputs less.
    """
    return [*tasks.resolution_records(), *tasks.achieved_records(plan_file), *tasks.dataset_files()]


def handover_images(tasks: Tasks, plan_file: str) -> list[str]:
    """Images that packing reads: those of the phantoms, and harmonised ones where the study asks for them."""
    study = tasks.study
    names = [row.image for row in study.phantoms]
    names += [row.details["reference"] for row in study.phantoms if "reference" in row.details]
    found = [path for name in dict.fromkeys(names) for path in tasks.image(name)]
    if study.settings.handover.include_images:
        found += [tasks.layout.harmonised_image(row) for row in tasks.accepted(plan_file)]
    return found


def handover_settings(tasks: Tasks, plan_file: str, program_dir: Path) -> dict[str, Any]:
    """Settings of the bag: its own code, and all that the report and the tables depend on."""
    scripts = program_dir / "scripts"
    regional = [region_settings(tasks, row.entities) for row in regional_scans(tasks, plan_file)]
    packed = ("make_audit_tables.py", "make_handover.py", "make_report.py")
    return {
        **report_settings(tasks, plan_file, program_dir / "workflow" / "report"),
        "code": code_token(scripts, files=packed),
        "handover": code_token(scripts, files=["make_handover.py"]),
        # What the report shows besides the tables.
        "shown": _digest([pictures_settings(tasks, plan_file), site_effect_settings(tasks, plan_file), regional]),
    }


def _digest(value: Any) -> str:
    return hashlib.sha256(json.dumps(value, sort_keys=True).encode()).hexdigest()
