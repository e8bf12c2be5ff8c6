"""An invented study whose periods have every verdict, as the audit's input: for the tests of the audit."""

from dataclasses import replace
from math import erf, log, sqrt
from typing import Any

from evenblur.audit.inputs import AuditInput

TARGET_MM = 7.0
TOLERANCE_MM = 0.3
SESSION = "s1"

# setup: in-plane (measured, statistical se, achieved), axial (the same), source in-plane, status
PERIODS: dict[str, tuple[Any, Any, str | None, str]] = {
    "A": ((5.2, 0.06, 7.02), (4.8, 0.09, 6.97), "uniform_cylinder", "smooth"),
    "B": ((6.9, 0.08, 6.91), (6.8, 0.1, 6.83), "hot_spheres", "at_target"),
    "C": ((4.1, 0.05, 7.45), (4.4, 0.07, 7.1), "point_source", "smooth"),
    "D": ((6.0, None, 7.01), (5.9, None, 7.05), "uniform_cylinder", "smooth"),
    "E": ((5.5, None, None), (5.5, None, None), "declared", "smooth"),
    "F": ((7.9, 0.1, None), (7.2, 0.1, None), "uniform_cylinder", "coarser"),
    "G": ((5.0, 0.1, None), (None, None, None), "line_source", "unmeasured"),
}
VERDICTS = {"A": "pass", "B": "pass", "C": "fail", "D": "unproven", "E": "declared", "F": "coarser", "G": "unmeasured"}
REPEATABILITY_MM = 0.2


def hexadecimal(setup: str) -> str:
    """A sign that a hash may hold, for each setup."""
    return setup.lower().replace("g", "0")


def settings() -> dict[str, Any]:
    """Resolved settings."""
    return {
        "study": {"title": "Seven invented cameras"},
        "modality": "pet",
        "demo": True,
        "tables": {"setups": "config/setups.tsv", "phantoms": "config/phantoms.tsv", "scans": "config/scans.tsv"},
        "results": "results",
        "target": {
            "choose": "coarsest",
            "in_plane_mm": None,
            "axial_mm": None,
            "isotropic": True,
            "allowance_se": 2.0,
            "round_up_to_mm": 0.1,
            "declared_counts": False,
            "approval": {"by": None, "on": None, "reason": None},
        },
        "kernel": "quadrature",
        "phantoms": {
            "choose": "latest_before",
            "valid_days": 365,
            "repeatability_mm": REPEATABILITY_MM,
            "prefer": ["uniform_cylinder", "hot_spheres", "line_source", "point_source"],
        },
        "tolerance": {"achieved_mm": TOLERANCE_MM, "no_kernel_below_mm": 0.5},
        "coarser_than_target": "hold",
        "reconstruction_mismatch": "hold",
    }


def example_audit(**changes: Any) -> AuditInput:
    """The study's records; `changes` replace whole fields of the input."""
    scans = [scan for setup in PERIODS for scan in _scans(setup)]
    accepted = [scan for scan in scans if scan["status"] == "accepted"]
    measured = [setup for setup in PERIODS if setup != "E"]
    audit = AuditInput(
        settings=settings(),
        setups=tuple(
            {
                "setup": setup,
                "site": f"site{setup}",
                "scanner": f"invented camera {setup}",
                "reconstruction": "OSEM 4 iterations, 5 mm filter",
            }
            for setup in PERIODS
        ),
        phantoms=(
            *(_phantom_row(setup) for setup in measured),
            {
                **_phantom_row("A"),
                "phantom": "old",
                "use": "no",
                "use_reason": "Bubble\tin the fill",
                "decided_by": "QA",
            },
        ),
        scans=tuple({**scan, "use": "yes"} for scan in scans),
        plan={
            "target": {
                "in_plane_mm": TARGET_MM,
                "axial_mm": TARGET_MM,
                "choose": "coarsest",
                "decided_by": "B.s1",
                "on": None,
                "reason": None,
            },
            "periods": [_period(setup) for setup in PERIODS],
            "scans": scans,
            "counts": {"accepted": len(accepted), "held": len(scans) - len(accepted)},
        },
        resolution={f"ph{setup}": _resolution(setup) for setup in measured},
        intake_phantoms={
            f"ph{setup}": {"holds": [], "flags": [], "sha256": hexadecimal(setup) * 64} for setup in measured
        },
        intake_scans={
            scan["entities"]: {"holds": scan["reasons"], "flags": [], "voxel_mm": [2.0, 2.0, 3.27], "frames": 1}
            for scan in scans
        },
        achieved={(setup, SESSION): _achieved(setup) for setup in "ABCD"},
        scan_records={scan["entities"]: _scan_record(scan) for scan in accepted},
        harmonised_files=(
            "results/harmonised/dataset_description.json",
            *(name for scan in accepted for name in _files(scan)),
        ),
    )
    return replace(audit, **changes)


def _period(setup: str) -> dict[str, Any]:
    in_plane, axial, source, status = PERIODS[setup]
    left_out = status in ("coarser", "unmeasured")
    kernels = {}
    for name, (measured, _, _) in (("in_plane_mm", in_plane), ("axial_mm", axial)):
        kernels[name] = None if measured is None or measured > TARGET_MM else round(sqrt(49.0 - measured**2), 4)
    applied = {name: None if left_out else value for name, value in kernels.items()}
    return {
        "setup": setup,
        "phantom_session": "declared" if setup == "E" else SESSION,
        "phantoms": [] if setup == "E" else [f"ph{setup}"],
        "acquired": None if setup == "E" else "2025-03-01",
        "measured": {
            "in_plane_mm": in_plane[0],
            "in_plane_se_mm": _with_repeatability(in_plane),
            "axial_mm": axial[0],
            "axial_se_mm": _with_repeatability(axial),
        },
        "statistical": {"in_plane_se_mm": in_plane[1], "axial_se_mm": axial[1]},
        "source": {"in_plane": source, "axial": None if axial[0] is None else source},
        "kernel": {**applied, "rule": "quadrature"},
        "quadrature": kernels,
        "status": status,
        "flags": [{"code": "declared_width", "text": "", "value": None}] if setup == "E" else [],
        "other_kinds": (
            [
                {
                    "kind": "point_source",
                    "direction": "in_plane",
                    "fwhm_mm": 5.3,
                    "difference_mm": 0.1,
                    "combined_se_mm": 0.3,
                }
            ]
            if setup == "A"
            else []
        ),
    }


def _with_repeatability(width: Any) -> float | None:
    return None if width[0] is None else round(sqrt((width[1] or 0.0) ** 2 + REPEATABILITY_MM**2), 4)


def _phantom_row(setup: str) -> dict[str, Any]:
    kind = PERIODS[setup][2]
    return {
        "phantom": f"ph{setup}",
        "setup": setup,
        "phantom_session": SESSION,
        "acquired": "2025-03-01",
        "kind": kind,
        "image": f"data/ph{setup}.nii.gz",
        "use": "yes",
    }


def _resolution(setup: str) -> dict[str, Any]:
    widths = {}
    for name, (measured, se_mm, _) in zip(("in_plane", "axial"), PERIODS[setup][:2], strict=True):
        widths[name] = None if measured is None else {"fwhm_mm": measured, "se_mm": se_mm, "df": se_mm and 11.0}
    return {
        "phantom": f"ph{setup}",
        "setup": setup,
        "phantom_session": SESSION,
        "kind": PERIODS[setup][2],
        **widths,
        "flags": [],
        "fit": {},
        "input": {"path": f"data/ph{setup}.nii.gz", "sha256": hexadecimal(setup) * 64},
        "method": {"name": PERIODS[setup][2], "version": "1"},
    }


def _achieved(setup: str) -> dict[str, Any]:
    widths = {}
    for name, (_, se_mm, achieved) in zip(("in_plane", "axial"), PERIODS[setup][:2], strict=True):
        widths[name] = {"fwhm_mm": achieved, "se_mm": se_mm, "df": se_mm and 11.0}
    profiles = {"before": _edge(PERIODS[setup][0][0]), "after": _edge(TARGET_MM)}
    return {
        "setup": setup,
        "phantom_session": SESSION,
        "kind": PERIODS[setup][2],
        "phantoms": [f"ph{setup}"],
        **widths,
        "kernel": {},
        "flags": [],
        "profiles": {f"ph{setup}": profiles},
        "method": {"name": PERIODS[setup][2], "version": "1"},
    }


def _edge(fwhm_mm: float) -> dict[str, Any]:
    sigma_mm = fwhm_mm / (2 * sqrt(2 * log(2)))
    positions = [0.5 * step - 15.0 for step in range(61)]
    fitted = [5000.0 * (1 - erf(x / (sigma_mm * sqrt(2)))) for x in positions]
    ripple = [120.0 * ((7 * index) % 5 - 2) for index in range(61)]
    return {
        "position_mm": positions,
        "measured": [value + wobble for value, wobble in zip(fitted, ripple, strict=True)],
        "fitted": fitted,
        "label": "distance from the edge",
        "unit": "Bq/mL",
    }


def _scans(setup: str) -> list[dict[str, Any]]:
    session = "declared" if setup == "E" else SESSION
    reasons = {"F": ["coarser_than_target"], "G": ["unmeasured"]}.get(setup, [])
    scans = [_scan(setup, number, session, reasons) for number in (1, 2)]
    if setup == "A":
        scans.append(_scan(setup, 3, None, ["image_missing"]))
        scans.append(_scan(setup, 4, None, ["phantom_expired", "code_from_tomorrow"]))
    return scans


def _scan(setup: str, number: int, session: str | None, reasons: list[str]) -> dict[str, Any]:
    subject = f"{setup.lower()}{number:02d}"
    return {
        "subject": subject,
        "session": "base",
        "entities": f"sub-{subject}_ses-base",
        "setup": setup,
        "phantom_session": session,
        "sha256": None if "image_missing" in reasons else f"{number}{hexadecimal(setup)}" * 32,
        "status": "held" if reasons else "accepted",
        "reasons": reasons,
        "days_from_phantom": None if session in (None, "declared") else 10 * number,
        "image": f"data/{subject}.nii.gz",
        "note": "",
    }


def _files(scan: dict[str, Any]) -> tuple[str, str]:
    stem = f"results/harmonised/sub-{scan['subject']}/ses-base/pet/{scan['entities']}_desc-harmonised_pet"
    return f"{stem}.nii.gz", f"{stem}.json"


def _scan_record(scan: dict[str, Any]) -> dict[str, Any]:
    kernel = _period(scan["setup"])["kernel"]
    return {
        "Description": "An invented scan.",
        "Evenblur": {
            "kernel": {"in_plane_mm": kernel["in_plane_mm"], "axial_mm": kernel["axial_mm"]},
            "voxel_mm": [2.0, 2.0, 3.27],
            "frames": 1,
            "total_before_ml": 123456789.125,
            "total_after_ml": 123456789.5,
            "input": {"path": scan["image"], "sha256": scan["sha256"]},
            "output": {"sha256": "0123456789abcdef" * 4},
            "smoothing_version": "0.1 4f2c",
            "versions": {"python": "3.13.1", "numpy": "2.4.0", "scipy": "1.17.0", "nibabel": "5.4.0"},
            "flags": [{"code": "units_unknown", "text": "", "value": None}] if scan["subject"] == "b01" else [],
        },
    }
