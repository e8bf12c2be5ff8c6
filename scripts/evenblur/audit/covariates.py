"""Covariates of every accepted scan, for a statistics package."""

from math import sqrt

from evenblur.audit.inputs import AuditInput, accepted
from evenblur.audit.periods import periods_of
from evenblur.audit.tables import cell, number

COVARIATES_COLUMNS = (
    "subject",
    "session",
    "tracer",
    "run",
    "site",
    "setup",
    "phantom_session",
    "measured_in_plane_mm",
    "measured_axial_mm",
    "target_in_plane_mm",
    "target_axial_mm",
    "kernel_in_plane_mm",
    "kernel_axial_mm",
    "resulting_in_plane_se_mm",
    "resulting_axial_se_mm",
    "noise_factor",
    "days_from_phantom",
    "verdict",
)


def covariates_rows(audit: AuditInput) -> list[dict[str, str]]:
    """One row an accepted scan, in the plan's order; keys are `COVARIATES_COLUMNS`.

    `noise_factor` is what the standard deviation of white noise was multiplied by.
    """
    periods = {(period.setup, period.phantom_session): period for period in periods_of(audit)}
    rows = []
    for scan in accepted(audit.plan):
        period = periods[scan["setup"], str(scan["phantom_session"])]
        made = audit.scan_records.get(scan["entities"], {}).get("Evenblur") or {}
        kernel, factor = made.get("kernel") or {}, made.get("noise_variance_factor")
        row = {
            "subject": cell(scan["subject"]),
            "session": cell(scan["session"]),
            "tracer": cell(scan.get("tracer")),
            "run": cell(scan.get("run")),
            "site": period.site,
            "setup": period.setup,
            "phantom_session": period.phantom_session,
            "noise_factor": number(None if factor is None else sqrt(factor)),
            "days_from_phantom": cell(scan.get("days_from_phantom")),
            "verdict": period.verdict,
        }
        for name, side in (("in_plane", period.in_plane), ("axial", period.axial)):
            row |= {
                f"measured_{name}_mm": number(side.facts.measured_mm),
                f"target_{name}_mm": number(side.facts.target_mm),
                f"kernel_{name}_mm": number(kernel.get(f"{name}_mm")),
                f"resulting_{name}_se_mm": number(side.resulting_se_mm),
            }
        rows.append(row)
    return rows
