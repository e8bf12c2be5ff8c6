"""Why a scan is held and what is flagged about it: before any kernel is known, and once its period has one."""

from collections.abc import Mapping, Sequence

from evenblur.images.facts import radionuclide
from evenblur.plan.across import flag_units, hold_copies, hold_results, in_plane_shape, voxels_by_direction
from evenblur.plan.combining import DIRECTIONS
from evenblur.plan.drafts import PeriodDraft, Record, ScanDraft
from evenblur.plan.reconstruction import compare_reconstruction
from evenblur.plan.sessions import PhantomSession, choose_session, group_sessions
from evenblur.study.reading import Study
from evenblur.study.rows import RESERVED

FEW_VOXELS = 1.5
OBLIQUE_LIMIT_DEG = 2.0
SAME_WIDTH_SHARE = 0.01
"""A grid tilted by more than the limit is used only where both widths agree to this share."""

SAME_VOXEL_SHARE = 0.01
"""Voxel sizes of phantom and scan may differ by this share: headers round."""


def hold_before_kernels(
    study: Study,
    scans: Sequence[ScanDraft],
    periods: Mapping[str, PeriodDraft],
    phantoms_intake: Mapping[str, Record],
    outputs: Mapping[str, str],
) -> None:
    """Holds that no target can change; what remains decides which periods are in use.

    Parameters
    ----------
    study
        The study.
    scans, periods
        The drafts; they are filled in.
    phantoms_intake
        Intake records by phantom label.
    outputs
        Scans by the voxels' hash of their harmonised images, as far as this study made some before.
    """
    sessions = group_sessions(study.phantoms)
    for scan in scans:
        row, intake = scan.row, scan.intake
        if row.use == "no":
            by = f" (decided by {row.decided_by})" if row.decided_by else ""
            scan.hold("excluded_by_decision", f"{row.use_reason}{by}")
        for code, problem in zip(intake["holds"], intake["problems"], strict=True):
            scan.hold(code, problem.partition("; ")[0])
        scan.flags += intake["flags"]
    hold_results(scans, outputs)
    hold_copies(scans, phantoms_intake)
    flag_units(scans)
    for scan in scans:
        _find_period(study, scan, sessions, periods)
        if scan.period is not None:
            _look_at_sampling(scan, scan.period, phantoms_intake)
            _compare_with_phantoms(study, scan, scan.period, phantoms_intake)
            if not scan.reasons:
                scan.period.in_use = True


def _find_period(
    study: Study,
    scan: ScanDraft,
    sessions: Mapping[str, list[PhantomSession]],
    periods: Mapping[str, PeriodDraft],
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
        unused = [row.phantom for row in study.phantoms if row.setup == setup.setup and row.use == "no"]
        words = f"; out of use by decision: {', '.join(unused)}" if unused else ""
        scan.hold(choice.reason or "no_phantom_session", choice.note + words)
        return
    scan.period = periods[f"{setup.setup}.{choice.session.label}"]
    scan.days = (scan.row.acquired - choice.session.acquired).days
    if scan.days > rules.valid_days:
        scan.flag("validity_extended", _extended(choice.session, scan.days), float(scan.days))


def _extended(session: PhantomSession, days: int) -> str:
    decided = [row for row in session.phantoms if row.valid_until is not None]
    who = "; ".join(dict.fromkeys(row.decided_by for row in decided if row.decided_by))
    why = "; ".join(dict.fromkeys(row.use_reason for row in decided if row.use_reason))
    text = f"phantom session {session.label} is {days} days old and was let speak until {session.valid_until}"
    return text + (f" (decided by {who})" if who else "") + (f": {why}" if why else "")


def _look_at_sampling(scan: ScanDraft, period: PeriodDraft, phantoms_intake: Mapping[str, Record]) -> None:
    """Enough voxels across the measured width, in the scan and in the phantoms behind the width."""
    own = voxels_by_direction(scan.intake)
    for direction, width in period.widths.items():
        if width is None:
            continue
        sizes = [own, *(voxels_by_direction(phantoms_intake[label]) for label in width.phantoms)]
        coarsest = max((size[direction] for size in sizes if size), default=None)
        words = direction.replace("_", "-")
        if coarsest is not None and width.fwhm_mm < coarsest:
            scan.hold("under_sampled", f"voxels of {coarsest:g} mm under an {words} width of {width.fwhm_mm:.2f} mm")
        elif coarsest is not None and width.fwhm_mm < FEW_VOXELS * coarsest:
            voxels = width.fwhm_mm / coarsest
            scan.flag("under_sampled_width", f"{voxels:.1f} voxels across the {words} width", voxels)


def _compare_with_phantoms(
    study: Study, scan: ScanDraft, period: PeriodDraft, phantoms_intake: Mapping[str, Record]
) -> None:
    """Does the phantom speak for the scan: grid, reconstruction and radionuclide of both."""
    own = voxels_by_direction(scan.intake)
    if not own or period.session is None:
        return
    rows = {row.phantom: row for row in period.session.phantoms}
    unstated: dict[str, None] = {}
    for label in period.speaking:
        intake = phantoms_intake[label]
        other = voxels_by_direction(intake)
        if not other:
            continue
        compared = compare_reconstruction(scan.intake.get("reconstruction"), intake.get("reconstruction"))
        unstated |= dict.fromkeys(compared.unstated)
        if compared.apart:
            text = f"scan and phantom {label} differ in {', '.join(compared.apart)}"
            _hold_or_flag(study, scan, "reconstruction_differs", text)
        if any(abs(own[d] - other[d]) > SAME_VOXEL_SHARE * other[d] for d in DIRECTIONS):
            text = f"voxels of the scan {_sizes(own)}, of phantom {label} {_sizes(other)}"
            _hold_or_flag(study, scan, "voxel_size_differs", text, own["in_plane"])
        elif in_plane_shape(scan.intake) != in_plane_shape(intake):
            sizes = (" x ".join(map(str, in_plane_shape(record))) for record in (scan.intake, intake))
            scan.flag("matrix_differs", "matrix of the scan {}, of phantom {label} {}".format(*sizes, label=label))
        nuclides = [
            radionuclide(row.radionuclide) or row.radionuclide or record.get("radionuclide")
            for row, record in ((scan.row, scan.intake), (rows[label], intake))
        ]
        if all(nuclides) and nuclides[0] != nuclides[1]:
            scan.flag("radionuclide_differs", f"scan with {nuclides[0]}, phantom {label} with {nuclides[1]}")
    if unstated:
        scan.flag("reconstruction_unverified", f"scan and phantom do not both state: {', '.join(unstated)}")


def _hold_or_flag(study: Study, scan: ScanDraft, code: str, text: str, value: float | None = None) -> None:
    if study.settings.reconstruction_mismatch == "hold":
        known = scan.notes.get("reconstruction_mismatch")
        scan.hold("reconstruction_mismatch", text)
        scan.notes["reconstruction_mismatch"] = f"{known}; {text}" if known else text
    else:
        scan.flag(code, text, value)


def _sizes(voxels: Mapping[str, float]) -> str:
    return f"{voxels['in_plane']:g} mm in-plane and {voxels['axial']:g} mm axial"


def hold_after_kernels(scan: ScanDraft, phantoms_intake: Mapping[str, Record]) -> None:
    """Holds that follow from the status and the kernel of the scan's period."""
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


def _hold_for_grid(scan: ScanDraft, period: PeriodDraft, phantoms_intake: Mapping[str, Record]) -> None:
    if not voxels_by_direction(scan.intake):
        return
    kernel = {direction: period.kernel[direction] or 0.0 for direction in DIRECTIONS}
    tilt = scan.intake["oblique_deg"]
    if tilt is not None and tilt > OBLIQUE_LIMIT_DEG:
        if _agree(*kernel.values()):
            text = f"the grid is tilted by {tilt:.1f} degrees; both kernel widths agree"
            scan.flag("oblique_grid_used", text, tilt)
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
