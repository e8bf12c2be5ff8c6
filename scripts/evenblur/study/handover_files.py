"""What the bag for the auditor is made from, and the settings that decide whether it still holds."""

from pathlib import Path
from typing import Any

from evenblur.code_identity import code_token
from evenblur.study.reading import Study
from evenblur.study.records import Layout
from evenblur.study.tasks import Tasks


def history_file() -> str:
    """The study's change log, relative to the study folder; a study need not have one."""
    return "history.tsv"


def audit_files(study: Study) -> list[str]:
    """Files of the audit that the bag holds, relative to the study folder."""
    layout = Layout(study)
    return [layout.audit(name) for name in ("sites.tsv", "scans.tsv", "queries.tsv", "report.html")]


def handover_records(tasks: Tasks, plan_file: str) -> list[str]:
    """Records that the bag holds besides the plan, the draft plan and the matching records."""
    return [
        *tasks.intake_records(),
        *tasks.resolution_records(),
        *tasks.achieved_records(plan_file),
        *tasks.scan_records(plan_file),
        *tasks.dataset_files(),
    ]


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
    packed = ("make_audit_tables.py", "make_handover.py", "make_report.py")
    return {
        **tasks.report_settings(plan_file),
        "code": code_token(scripts, files=packed),
        "handover": code_token(scripts, files=["make_handover.py"]),
    }
