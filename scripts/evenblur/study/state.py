"""What the history keeps of a study: its decisions, phantoms, target, kernels and scans, each as plain text fields."""

import json
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any

from evenblur.command import read_record
from evenblur.study.history import State, clean
from evenblur.study.reading import Study, resolved
from evenblur.study.records import Layout
from evenblur.study.rows import PhantomRow, Row, ScanRow

STUDY, PROGRAM, TARGET = "study.yaml", "program", "target"
SETUP, PHANTOM, PERIOD, SCAN = "setup ", "phantom ", "period ", "scan "

MADE_FIELDS = frozenset(
    {
        *("phantom_session", "status", "reasons", "input_sha256", "kernel_in_plane_mm", "kernel_axial_mm"),
        *("output_sha256", "smoothing_version", "image_sha256"),
        *("measured_in_plane_mm", "measured_in_plane_se_mm", "measured_axial_mm", "measured_axial_se_mm"),
    }
)
"""Fields of phantoms and scans that a run finds out; all others stand in the study's own files."""

GONE = ("missing", "unreadable")

Digest = Callable[[str], str | None]


def text(value: Any) -> str:
    """A value as the history has it.

    >>> text(None), text(8.0), text(["a", "b"]), text({"radius_mm": 100.0})
    ('', '8.0', 'a; b', '{"radius_mm": 100.0}')
    """
    if value is None:
        return ""
    if isinstance(value, str):
        return clean(value)
    if isinstance(value, list | tuple):
        return "; ".join(text(part) for part in value)
    return clean(json.dumps(value, sort_keys=True, ensure_ascii=False)) if value != {} else ""


def _fields(values: Mapping[str, Any]) -> dict[str, str]:
    named = {name: text(value) for name, value in values.items()}
    return {clean(name): value for name, value in named.items() if value}


def study_state(study: Study, *, digest: Digest | None = None) -> State:
    """What the study's own files say: settings, setups, phantoms and scans.

    Parameters
    ----------
    study
        The study.
    digest
        Gives the identity of an image by its path, None where it is not known before the run; leave it out to leave
        identities out.
    """
    plain = resolved(study)
    state: State = {STUDY: _fields(_leaves(plain["settings"]))}
    for setup, row in zip(study.setups, plain["setups"], strict=True):
        state[SETUP + setup.setup] = _row_fields(setup, row, leave="setup")
    for phantom, row in zip(study.phantoms, plain["phantoms"], strict=True):
        identity = {"image_sha256": digest(phantom.image)} if digest is not None else {}
        state[PHANTOM + phantom.phantom] = {**_row_fields(phantom, row, leave="phantom"), **_fields(identity)}
    for scan, row in zip(study.scans, plain["scans"], strict=True):
        identity = {"input_sha256": digest(scan.image)} if digest is not None else {}
        state[SCAN + scan.entities] = {**_row_fields(scan, row), **_fields(identity)}
    return state


def _row_fields(row: Row, plain: Mapping[str, Any], leave: str = "") -> dict[str, str]:
    """A table row; a column of the user's own gets a name that no field of ours can have."""
    notes = row.notes
    return _fields({f"note {name}" if name in notes else name: plain[name] for name in plain if name != leave})


def _leaves(settings: Mapping[str, Any], above: str = "") -> dict[str, Any]:
    leaves: dict[str, Any] = {}
    for name, value in settings.items():
        if isinstance(value, Mapping):
            leaves |= _leaves(value, f"{above}{name}.")
        else:
            leaves[above + name] = value
    return leaves


def plan_state(plan: Mapping[str, Any]) -> State:
    """What the plan says: the target, every period's widths and kernel, every scan's status and kernel."""
    state: State = {TARGET: _fields(plan["target"])}
    kernels = {}
    for period in plan["periods"]:
        name = f"{period['setup']}.{period['phantom_session']}"
        kernels[name] = {f"kernel_{way}_mm": period["kernel"][f"{way}_mm"] for way in ("in_plane", "axial")}
        measured = {f"measured_{key}": value for key, value in period["measured"].items()}
        rule = {"kernel_rule": period["kernel"].get("rule")}
        state[PERIOD + name] = _fields({"status": period["status"], **measured, **kernels[name], **rule})
    for scan in plan["scans"]:
        lost = GONE[0] if "image_missing" in scan["reasons"] else GONE[1]
        fields = {
            "phantom_session": scan["phantom_session"],
            "status": scan["status"],
            "reasons": scan["reasons"],
            "input_sha256": scan["sha256"] or lost,
        }
        accepted = scan["status"] == "accepted"
        fields |= kernels.get(f"{scan['setup']}.{scan['phantom_session']}", {}) if accepted else {}
        state[SCAN + scan["entities"]] = _fields(fields)
    return state


def current_state(study_dir: Path, study: Study, *, program: Mapping[str, str]) -> State:
    """All that the history keeps, as it stands after a run.

    Parameters
    ----------
    study_dir, study
        The study folder and its study.
    program
        The version and the code identities of the steps.

    Raises
    ------
    InputError
        If a record that the plan asks for is missing or damaged.
    """
    layout = Layout(study)
    plan = read_record(study_dir / layout.plan)
    state = merged(study_state(study), plan_state(plan))
    for phantom in study.phantoms:
        state[PHANTOM + phantom.phantom] |= _phantom_record(study_dir, layout, phantom)
    for scan in study.scans:
        fields = state[SCAN + scan.entities]
        if fields.get("status") == "accepted":
            record = read_record(study_dir / layout.scan_record(scan)).get("Evenblur", {})
            output = {"output_sha256": record.get("output", {}).get("sha256")}
            fields |= _fields({**output, "smoothing_version": record.get("smoothing_version")})
    whole = {**state, PROGRAM: _fields(program)}
    return {item: whole[item] for item in sorted(whole, key=_rank)}


def _rank(item: str) -> int:
    order = (STUDY, PROGRAM, SETUP, PHANTOM, TARGET, PERIOD, SCAN)
    return next(place for place, kind in enumerate(order) if item.startswith(kind))


def _phantom_record(study_dir: Path, layout: Layout, row: PhantomRow) -> dict[str, str]:
    intake = read_record(study_dir / layout.intake(row))
    lost = GONE[0] if "image_missing" in intake["holds"] else GONE[1]
    values: dict[str, Any] = {"image_sha256": intake["sha256"] or lost}
    path = study_dir / layout.resolution(row.phantom)
    if row.use == "yes" and intake["sha256"] is not None and path.is_file():
        record = read_record(path)
        for way in ("in_plane", "axial"):
            width = record.get(way) or {}
            values |= {f"measured_{way}_mm": width.get("fwhm_mm"), f"measured_{way}_se_mm": width.get("se_mm")}
    return _fields(values)


def merged(first: State, second: State) -> State:
    """Two states in one; items of the second alone come where its own order puts them, after the first's."""
    state = {item: dict(fields) for item, fields in first.items()}
    for item, fields in second.items():
        state.setdefault(item, {}).update(fields)
    return state


def reasons_of(study: Study) -> dict[str, str]:
    """Reasons that the study's own files give, by item."""
    approval = study.settings.target.approval
    reasons = {}
    if approval.reason:
        signed = f"{approval.reason} (approved by {approval.by or '?'}{f' on {approval.on}' if approval.on else ''})"
        reasons = {STUDY: signed, TARGET: signed}
    reasons |= {PHANTOM + row.phantom: _decision(row) for row in study.phantoms}
    reasons |= {SCAN + row.entities: _decision(row) for row in study.scans}
    return {item: clean(reason) for item, reason in reasons.items() if reason}


def _decision(row: PhantomRow | ScanRow) -> str:
    if not row.use_reason:
        return ""
    return f"{row.use_reason} (decided by {row.decided_by})" if row.decided_by else str(row.use_reason)
