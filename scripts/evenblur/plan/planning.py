"""Make the plan: sessions to scans, target, kernels, statuses, and every held scan with its reasons."""

import re
from collections.abc import Mapping
from typing import Any

from evenblur.errors import InputError
from evenblur.plan.across import copied_phantoms
from evenblur.plan.combining import DIRECTIONS, PeriodWidth, period_width, rounded
from evenblur.plan.drafts import PeriodDraft, Record, ScanDraft
from evenblur.plan.drift import control_charts, drift_flag
from evenblur.plan.scan_holds import hold_after_kernels, hold_before_kernels
from evenblur.plan.sessions import group_sessions
from evenblur.plan.targets import Candidate, Target, decide_target
from evenblur.study.reading import Study
from evenblur.study.rows import RESERVED, SetupRow
from evenblur.widths import missing_width

ITERATIVE = re.compile(
    r"iterat|subset|\bos-?em|\bml-?em|expectation|resolution model|\bpsf|point.spread", re.IGNORECASE
)
"""Words of the column `reconstruction` that tell an iterative reconstruction."""


def make_plan(
    study: Study,
    *,
    scans_intake: Mapping[str, Record],
    phantoms_intake: Mapping[str, Record],
    resolution: Mapping[str, Record],
    matching: Mapping[str, Record] | None = None,
    outputs: Mapping[str, str] | None = None,
) -> dict[str, Any]:
    """The plan of a study.

    Parameters
    ----------
    study
        The study's settings and tables.
    scans_intake, phantoms_intake
        Intake records by scan key and by phantom label.
    resolution
        Resolution records by phantom label; phantoms without an image have none.
    matching
        Matching records by period; a period without one keeps the kernel that quadrature gives.
    outputs
        Scans by the voxels' hash of their harmonised images, as far as this study made some before.

    Returns
    -------
    dict
        The content of plan.json.

    Raises
    ------
    InputError
        Where a period is coarser than the target and the study says `coarser_than_target: stop`.
    """
    periods = _list_periods(study, phantoms_intake, resolution)
    drift = _watch_drift(study, periods)
    scans = [ScanDraft(row, scans_intake[row.entities]) for row in study.scans]
    hold_before_kernels(study, scans, periods, phantoms_intake, outputs or {})
    candidates = [p for p in periods.values() if p.whole and p.in_use] or [p for p in periods.values() if p.whole]
    target = decide_target(
        study.settings.target, [Candidate(p.name, p.whole) for p in candidates if p.whole is not None]
    )
    for period in periods.values():
        _give_kernel(period, target, study)
        _match_kernel(period, (matching or {}).get(period.name), study)
    _stop_if_asked(study, periods, target)
    for scan in scans:
        hold_after_kernels(scan, phantoms_intake)
    listed = [_scan_entry(scan) for scan in scans]
    accepted = sum(entry["status"] == "accepted" for entry in listed)
    return {
        "target": target.record(),
        "periods": [_period_entry(period) for period in periods.values()],
        "scans": listed,
        "counts": {"accepted": accepted, "held": len(listed) - accepted},
        "drift": drift,
    }


def _watch_drift(study: Study, periods: dict[str, PeriodDraft]) -> list[dict[str, Any]]:
    """The control charts of every setup; a session beyond its limits is flagged."""
    charts = []
    for setup in study.setups:
        own = [(p.session, p.widths) for p in periods.values() if p.setup is setup and p.session is not None]
        for chart in control_charts(setup, own):
            charts.append(chart)
            for point in chart["points"]:
                if point["beyond"]:
                    periods[f"{setup.setup}.{point['phantom_session']}"].flags.append(drift_flag(chart, point))
    return charts


def reasons_before_measuring(
    study: Study, *, scans_intake: Mapping[str, Record], phantoms_intake: Mapping[str, Record]
) -> list[ScanDraft]:
    """The scans with the reasons and flags that tables and intake alone give: what a site can mend already.

    Parameters
    ----------
    study
        The study's settings and tables.
    scans_intake, phantoms_intake
        Intake records by scan key and by phantom label.
    """
    scans = [ScanDraft(row, scans_intake[row.entities]) for row in study.scans]
    hold_before_kernels(study, scans, _list_periods(study, phantoms_intake, {}), phantoms_intake, {})
    return scans


def _list_periods(
    study: Study, intake: Mapping[str, Record], resolution: Mapping[str, Record]
) -> dict[str, PeriodDraft]:
    sessions = group_sessions(study.phantoms)
    copies = copied_phantoms(study.phantoms, intake)
    periods: dict[str, PeriodDraft] = {}
    for setup in study.setups:
        found = sessions.get(setup.setup, [])
        for session in found:
            labels = [row.phantom for row in session.phantoms]
            # A picture that stands twice in a session is one witness, not two; one that its intake holds is none.
            records = [resolution[name] for name in labels if name in resolution and copies.get(name) not in labels]
            held = [name for name in labels if intake[name]["holds"]]
            usable = [record for record in records if record["phantom"] not in held]
            period = PeriodDraft(setup, session.label, session, _widths(study, setup, usable), [])
            period.flags += [flag for record in records for flag in record["flags"]]
            period.flags += _sources_in_air(period)
            period.flags += [_copied(label, copies[label]) for label in labels if label in copies]
            gone = [label for label in labels if label not in resolution or label in held]
            period.flags += [_phantom_gone(label, intake[label]) for label in gone]
            periods[period.name] = period
        declared = setup.declared_in_plane_mm is not None or setup.declared_axial_mm is not None
        if not found and declared:
            period = PeriodDraft(setup, RESERVED, None, _widths(study, setup, []), [])
            periods[period.name] = period
    return periods


def _copied(label: str, earlier: str) -> dict[str, Any]:
    return {"code": "duplicate_phantom", "text": f"phantoms {label} and {earlier} are the same picture", "value": None}


def _sources_in_air(period: PeriodDraft) -> list[dict[str, Any]]:
    """A flag where a bare source speaks for an iterative reconstruction, which resolves it better than tissue."""
    kinds = sorted({w.source for w in period.widths.values() if w and w.source in ("point_source", "line_source")})
    words = period.setup.reconstruction
    if not kinds or not ITERATIVE.search(words):
        return []
    kind = kinds[0].replace("_", " ")
    text = f"a {kind} has no background, and {period.setup.setup} reconstructs by {words}: its width reads too fine"
    return [{"code": "source_without_background", "text": text, "value": None}]


def _phantom_gone(label: str, intake: Record) -> dict[str, Any]:
    why = "; ".join(intake["problems"]) or "it cannot be used"
    return {"code": "phantom_missing", "text": f"phantom {label} gives no width: {why}", "value": None}


def _widths(study: Study, setup: SetupRow, records: list[Record]) -> dict[str, PeriodWidth | None]:
    settings = study.settings.phantoms
    return {
        direction: period_width(
            direction,
            records=records,
            prefer=settings.prefer,
            repeatability_mm=settings.repeatability_mm,
            declared_mm=setup.declared_mm(direction),
            declared_se_mm=setup.declared_se_mm,
        )
        for direction in DIRECTIONS
    }


def _give_kernel(period: PeriodDraft, target: Target, study: Study) -> None:
    tolerance = study.settings.tolerance
    widths = period.whole
    if widths is None or target.in_plane_mm is None:
        return
    excess = []
    for direction in DIRECTIONS:
        aim = target.mm(direction) or 0.0
        excess.append(rounded(widths[direction].fwhm_mm - aim))
        missing = rounded(missing_width(widths[direction].fwhm_mm, aim))
        period.quadrature[direction] = missing
        period.kernel[direction] = 0.0 if missing < tolerance.no_kernel_below_mm else missing
    if max(excess) > tolerance.achieved_mm:
        period.status = "coarser"
        period.kernel = dict.fromkeys(DIRECTIONS)
        period.quadrature = dict.fromkeys(DIRECTIONS)
    else:
        period.status = "smooth" if any(period.kernel.values()) else "at_target"


def _match_kernel(period: PeriodDraft, record: Record | None, study: Study) -> None:
    """Put a matched kernel in the place of the one by quadrature, in the directions that the phantoms speak for."""
    if record is None or period.status != "smooth":
        return
    if not record["settled"]:
        text = f"no kernel brings {period.name}'s own phantom to the target; the one by quadrature stands"
        period.flags.append({"code": "kernel_not_matched", "text": text, "value": None})
        return
    period.rule = "matched"
    for direction, width in period.widths.items():
        if width is not None and width.source != "declared":
            kernel = float(record["kernel"][f"{direction}_mm"])
            period.kernel[direction] = 0.0 if kernel < study.settings.tolerance.no_kernel_below_mm else kernel
    period.status = "smooth" if any(period.kernel.values()) else "at_target"


def _stop_if_asked(study: Study, periods: dict[str, PeriodDraft], target: Target) -> None:
    coarser = [p.name for p in periods.values() if p.status == "coarser" and p.in_use]
    if coarser and study.settings.coarser_than_target == "stop":
        what = f"coarser than the target of {target.in_plane_mm:g} x {target.axial_mm:g} mm: {', '.join(coarser)}"
        raise InputError(
            "config/study.yaml", what, "widen the target, take the setups out, or set coarser_than_target: hold"
        )


def _period_entry(period: PeriodDraft) -> dict[str, Any]:
    widths = period.widths
    known = [width for width in widths.values() if width is not None]
    measured: dict[str, float | None] = {}
    for direction in DIRECTIONS:
        width = widths[direction]
        measured[f"{direction}_mm"] = width.fwhm_mm if width else None
        measured[f"{direction}_se_mm"] = width.se_mm if width else None
    flags = period.flags + [flag for width in known for flag in width.flags]
    return {
        "setup": period.setup.setup,
        "phantom_session": period.label,
        "phantoms": [row.phantom for row in period.session.phantoms] if period.session else [],
        "acquired": period.session.acquired.isoformat() if period.session else None,
        "measured": measured,
        "statistical": {f"{d}_se_mm": _attribute(widths[d], "statistical_se_mm") for d in DIRECTIONS},
        "source": {d: _attribute(widths[d], "source") for d in DIRECTIONS},
        "source_phantoms": {d: list(_attribute(widths[d], "phantoms") or ()) for d in DIRECTIONS},
        "kernel": {**{f"{d}_mm": period.kernel[d] for d in DIRECTIONS}, "rule": period.rule},
        "quadrature": {f"{d}_mm": period.quadrature[d] for d in DIRECTIONS},
        "status": period.status,
        "in_use": period.in_use,
        "flags": list({(flag["code"], flag["text"]): flag for flag in flags}.values()),
        "other_kinds": [other for width in known for other in width.other_kinds],
    }


def _attribute(width: PeriodWidth | None, name: str) -> Any:
    return getattr(width, name) if width is not None else None


def _scan_entry(scan: ScanDraft) -> dict[str, Any]:
    row = scan.row
    return {
        "subject": row.subject,
        "session": row.session,
        "run": row.run,
        "tracer": row.tracer,
        "entities": row.entities,
        "setup": row.setup,
        "phantom_session": scan.period.label if scan.period else None,
        "sha256": scan.intake["sha256"],
        "status": "held" if scan.reasons else "accepted",
        "reasons": scan.reasons,
        "days_from_phantom": scan.days,
        "image": row.image,
        "note": "; ".join(note for note in scan.notes.values() if note),
        "notes": scan.notes,
        "flags": scan.flags,
    }
