"""Make the plan: sessions to scans, target, kernels, statuses, and every held scan with its reasons."""

import re
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

from evenblur.errors import InputError
from evenblur.plan.combining import DIRECTIONS, PeriodWidth, period_width, rounded
from evenblur.plan.drift import control_charts, drift_flag
from evenblur.plan.sessions import PhantomSession, choose_session, group_sessions
from evenblur.plan.targets import Candidate, Target, decide_target
from evenblur.study.reading import Study
from evenblur.study.rows import RESERVED, ScanRow, SetupRow
from evenblur.widths import missing_width

FEW_VOXELS = 1.5
OBLIQUE_LIMIT_DEG = 2.0
SAME_WIDTH_SHARE = 0.01
"""A grid tilted by more than the limit is used only where both widths agree to this share."""

ITERATIVE = re.compile(
    r"iterat|subset|\bos-?em|\bml-?em|expectation|resolution model|\bpsf|point.spread", re.IGNORECASE
)
"""Words of the column `reconstruction` that tell an iterative reconstruction."""

Record = Mapping[str, Any]


@dataclass
class _Period:
    """A period while the plan is made."""

    setup: SetupRow
    label: str
    session: PhantomSession | None
    widths: dict[str, PeriodWidth | None]
    flags: list[dict[str, Any]]
    in_use: bool = False
    status: str = "unmeasured"
    rule: str = "quadrature"
    kernel: dict[str, float | None] = field(default_factory=lambda: dict.fromkeys(DIRECTIONS))
    quadrature: dict[str, float | None] = field(default_factory=lambda: dict.fromkeys(DIRECTIONS))

    @property
    def name(self) -> str:
        return f"{self.setup.setup}.{self.label}"

    @property
    def whole(self) -> dict[str, PeriodWidth] | None:
        """Its widths where both directions have one."""
        found = {direction: width for direction, width in self.widths.items() if width is not None}
        return found if len(found) == len(DIRECTIONS) else None


@dataclass
class _Scan:
    """A scan while the plan is made."""

    row: ScanRow
    intake: Record
    period: _Period | None = None
    days: int | None = None
    reasons: list[str] = field(default_factory=list)
    notes: dict[str, str] = field(default_factory=dict)
    flags: list[dict[str, Any]] = field(default_factory=list)

    def hold(self, code: str, note: str = "") -> None:
        if code not in self.reasons:
            self.reasons.append(code)
            self.notes[code] = note


def make_plan(
    study: Study,
    *,
    scans_intake: Mapping[str, Record],
    phantoms_intake: Mapping[str, Record],
    resolution: Mapping[str, Record],
    matching: Mapping[str, Record] | None = None,
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
    scans = [_Scan(row, scans_intake[row.entities]) for row in study.scans]
    _hold_before_kernels(study, scans, periods, phantoms_intake)
    candidates = [p for p in periods.values() if p.whole and p.in_use] or [p for p in periods.values() if p.whole]
    target = decide_target(
        study.settings.target, [Candidate(p.name, p.whole) for p in candidates if p.whole is not None]
    )
    for period in periods.values():
        _give_kernel(period, target, study)
        _match_kernel(period, (matching or {}).get(period.name), study)
    _stop_if_asked(study, periods, target)
    for scan in scans:
        _hold_after_kernels(scan, phantoms_intake)
    listed = [_scan_entry(scan) for scan in scans]
    accepted = sum(entry["status"] == "accepted" for entry in listed)
    return {
        "target": target.record(),
        "periods": [_period_entry(period) for period in periods.values()],
        "scans": listed,
        "counts": {"accepted": accepted, "held": len(listed) - accepted},
        "drift": drift,
    }


def _watch_drift(study: Study, periods: dict[str, _Period]) -> list[dict[str, Any]]:
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


def _list_periods(study: Study, intake: Mapping[str, Record], resolution: Mapping[str, Record]) -> dict[str, _Period]:
    sessions = group_sessions(study.phantoms)
    copies = _copied_phantoms(study, intake)
    periods: dict[str, _Period] = {}
    for setup in study.setups:
        found = sessions.get(setup.setup, [])
        for session in found:
            labels = [row.phantom for row in session.phantoms]
            # A picture that stands twice in a session is one witness, not two.
            records = [resolution[name] for name in labels if name in resolution and copies.get(name) not in labels]
            period = _Period(setup, session.label, session, _widths(study, setup, records), [])
            period.flags += [flag for record in records for flag in record["flags"]]
            period.flags += _sources_in_air(period)
            period.flags += [_copied(label, copies[label]) for label in labels if label in copies]
            period.flags += [_phantom_gone(label, intake[label]) for label in labels if label not in resolution]
            periods[period.name] = period
        declared = setup.declared_in_plane_mm is not None or setup.declared_axial_mm is not None
        if not found and declared:
            period = _Period(setup, RESERVED, None, _widths(study, setup, []), [])
            periods[period.name] = period
    return periods


def _copied_phantoms(study: Study, intake: Mapping[str, Record]) -> dict[str, str]:
    """Phantoms in use whose picture stands under an earlier row of the table, with that row's label."""
    first: dict[str, str] = {}
    copies = {}
    for row in study.phantoms:
        picture = intake[row.phantom]["voxels_sha256"]
        if row.use == "yes" and picture is not None:
            earlier = first.setdefault(picture, row.phantom)
            if earlier != row.phantom:
                copies[row.phantom] = earlier
    return copies


def _copied(label: str, earlier: str) -> dict[str, Any]:
    return {"code": "duplicate_phantom", "text": f"phantoms {label} and {earlier} are the same picture", "value": None}


def _sources_in_air(period: _Period) -> list[dict[str, Any]]:
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


def _hold_before_kernels(
    study: Study, scans: list[_Scan], periods: dict[str, _Period], phantoms_intake: Mapping[str, Record]
) -> None:
    """Holds that no target can change; what remains decides which periods are in use."""
    sessions = group_sessions(study.phantoms)
    pictures: dict[str, str] = {
        str(record["voxels_sha256"]): f"phantom {label}"
        for label, record in phantoms_intake.items()
        if record["voxels_sha256"] is not None
    }
    for scan in scans:
        row, intake = scan.row, scan.intake
        if row.use == "no":
            scan.hold("excluded_by_decision", row.use_reason or "")
        for code, problem in zip(intake["holds"], intake["problems"], strict=True):
            scan.hold(code, problem.partition("; ")[0])
        scan.flags += intake["flags"]
        picture = intake["voxels_sha256"]
        if picture is not None and row.use == "yes" and "image_zero" not in intake["holds"]:
            first = pictures.setdefault(picture, row.entities)
            if first != row.entities:
                scan.hold("duplicate_image", f"the same picture as {first}")
        _find_period(study, scan, sessions, periods)
        if scan.period is not None:
            _compare_voxels(scan, phantoms_intake, study.settings.reconstruction_mismatch)
            if not scan.reasons:
                scan.period.in_use = True


def _find_period(
    study: Study, scan: _Scan, sessions: Mapping[str, list[PhantomSession]], periods: dict[str, _Period]
) -> None:
    setup = study.by_setup[scan.row.setup]
    declared = periods.get(f"{setup.setup}.{RESERVED}")
    if declared is not None:
        scan.period = declared
        return
    rules = study.settings.phantoms
    choice = choose_session(
        scan.row.acquired,
        setup=setup,
        sessions=sessions.get(setup.setup, []),
        rule=rules.choose,
        valid_days=rules.valid_days,
    )
    if choice.session is None:
        scan.hold(choice.reason or "no_phantom_session", choice.note)
        return
    scan.period = periods[f"{setup.setup}.{choice.session.label}"]
    scan.days = (scan.row.acquired - choice.session.acquired).days


def _compare_voxels(scan: _Scan, phantoms_intake: Mapping[str, Record], mismatch: str) -> None:
    """Enough voxels across the measured width in scan and phantom; the same voxel size and nuclide in both."""
    assert scan.period is not None
    own = _voxels_by_direction(scan.intake)
    for direction, width in scan.period.widths.items():
        if width is None:
            continue
        seen = [phantoms_intake[label] for label in width.phantoms]
        sizes = [own, *(_voxels_by_direction(record) for record in seen)]
        coarsest = max((size[direction] for size in sizes if size), default=None)
        if coarsest is not None and width.fwhm_mm < coarsest:
            words = direction.replace("_", "-")
            scan.hold("under_sampled", f"voxels of {coarsest:g} mm under an {words} width of {width.fwhm_mm:.2f} mm")
        elif coarsest is not None and width.fwhm_mm < FEW_VOXELS * coarsest:
            text = f"{width.fwhm_mm / coarsest:.1f} voxels across the {direction.replace('_', '-')} width"
            scan.flags.append({"code": "under_sampled_width", "text": text, "value": width.fwhm_mm / coarsest})
    session = scan.period.session
    if session is None:
        return
    for row in session.phantoms:
        _compare_reconstruction(scan, row.phantom, phantoms_intake[row.phantom], mismatch)
        other = _voxels_by_direction(phantoms_intake[row.phantom])
        if own and other and any(abs(own[d] - other[d]) > 0.01 * other[d] for d in DIRECTIONS):
            text = f"scan {_sizes(own)}, phantom {row.phantom} {_sizes(other)}"
            scan.flags.append({"code": "voxel_size_differs", "text": text, "value": own["in_plane"]})
        if scan.row.radionuclide and row.radionuclide and scan.row.radionuclide != row.radionuclide:
            text = f"scan with {scan.row.radionuclide}, phantom {row.phantom} with {row.radionuclide}"
            scan.flags.append({"code": "radionuclide_differs", "text": text, "value": None})


def _compare_reconstruction(scan: _Scan, phantom: str, intake: Record, mismatch: str) -> None:
    """Hold or flag a scan whose header tells another reconstruction than its phantom's, where both tell."""
    own, other = scan.intake.get("reconstruction") or {}, intake.get("reconstruction") or {}
    apart = [name for name in own if name in other and own[name] != other[name]]
    if not apart:
        return
    text = f"scan and phantom {phantom} differ in {', '.join(apart)}"
    if mismatch == "hold":
        scan.hold("reconstruction_mismatch", text)
    else:
        scan.flags.append({"code": "reconstruction_differs", "text": text, "value": None})


def _voxels_by_direction(intake: Record) -> dict[str, float]:
    """Largest in-plane and the axial voxel size (mm); empty where the image could not be read."""
    if intake["voxel_mm"] is None:
        return {}
    axial = intake["axial_axis"]
    in_plane = max(size for axis, size in enumerate(intake["voxel_mm"]) if axis != axial)
    return {"in_plane": in_plane, "axial": intake["voxel_mm"][axial]}


def _sizes(voxels: Mapping[str, float]) -> str:
    return f"{voxels['in_plane']:g} mm in-plane and {voxels['axial']:g} mm axial"


def _give_kernel(period: _Period, target: Target, study: Study) -> None:
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


def _match_kernel(period: _Period, record: Record | None, study: Study) -> None:
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


def _stop_if_asked(study: Study, periods: dict[str, _Period], target: Target) -> None:
    coarser = [p.name for p in periods.values() if p.status == "coarser" and p.in_use]
    if coarser and study.settings.coarser_than_target == "stop":
        what = f"coarser than the target of {target.in_plane_mm:g} x {target.axial_mm:g} mm: {', '.join(coarser)}"
        raise InputError(
            "config/study.yaml", what, "widen the target, take the setups out, or set coarser_than_target: hold"
        )


def _hold_after_kernels(scan: _Scan, phantoms_intake: Mapping[str, Record]) -> None:
    period = scan.period
    if period is None or (scan.reasons and not period.in_use):
        # Nothing of the period is in use: what its kernel would be is no reason, and no question to anybody.
        return
    if period.status == "unmeasured":
        lacking = [d.replace("_", "-") for d in DIRECTIONS if period.widths[d] is None]
        scan.hold("unmeasured", f"no {' and no '.join(lacking)} width" if lacking else "no target could be set")
    elif period.status == "coarser":
        scan.hold("coarser_than_target", f"{period.name} is coarser than the target")
    else:
        _hold_for_grid(scan, period, phantoms_intake)


def _hold_for_grid(scan: _Scan, period: _Period, phantoms_intake: Mapping[str, Record]) -> None:
    kernel = {direction: period.kernel[direction] or 0.0 for direction in DIRECTIONS}
    tilt = scan.intake["oblique_deg"]
    if tilt is not None and tilt > OBLIQUE_LIMIT_DEG:
        if _agree(*kernel.values()):
            text = f"the grid is tilted by {tilt:.1f} degrees; both kernel widths agree"
            scan.flags.append({"code": "oblique_grid_used", "text": text, "value": tilt})
        else:
            scan.hold("oblique_grid", f"the grid is tilted by {tilt:.1f} degrees")
    widths = period.whole or {}
    for label in {name: None for width in widths.values() for name in width.phantoms}:
        tilt = phantoms_intake[label]["oblique_deg"]
        measured = [width.fwhm_mm for width in widths.values()]
        if tilt is not None and tilt > OBLIQUE_LIMIT_DEG and not _agree(*measured):
            scan.hold("oblique_grid", f"the grid of phantom {label} is tilted by {tilt:.1f} degrees")
    axial = scan.intake["axial_axis"]
    if axial is not None and kernel["axial"] > 0:
        length = scan.intake["shape"][axial] * scan.intake["voxel_mm"][axial]
        if length < kernel["axial"]:
            scan.hold("too_few_slices", f"{length:g} mm of slices under an axial kernel of {kernel['axial']:g} mm")


def _agree(first: float, second: float) -> bool:
    return abs(first - second) <= SAME_WIDTH_SHARE * max(first, second)


def _period_entry(period: _Period) -> dict[str, Any]:
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


def _scan_entry(scan: _Scan) -> dict[str, Any]:
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
