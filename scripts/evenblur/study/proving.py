"""What the achieved width and the matched kernel of a period are measured from."""

from pathlib import Path
from typing import Any

from evenblur.achieving import LoadedPhantom, ProvingPhantom, load_phantom
from evenblur.command import read_record
from evenblur.errors import InputError
from evenblur.plan.combining import DIRECTIONS
from evenblur.study.periods import find_period, is_matched, is_proved, proving_phantoms
from evenblur.study.reading import Study
from evenblur.study.records import Layout


def proving_inputs(study_dir: Path, study: Study, *, setup: str, phantom_session: str) -> dict[str, Any]:
    """The arguments of `achieved_width` for a period, from the plan, the tables and the resolution records.

    Raises
    ------
    InputError
        If a record is missing, or the plan gives the period no kernel.
    """
    layout = Layout(study)
    period = find_period(read_record(study_dir / layout.plan), setup, phantom_session)
    if not is_proved(period):
        raise InputError("plan.json", f"{setup}.{phantom_session} has nothing to measure again", "leave it out")
    phantoms, profiles = _phantoms(study_dir, study, period)
    return {
        "phantoms": phantoms,
        "in_plane_mm": period["kernel"]["in_plane_mm"],
        "axial_mm": period["kernel"]["axial_mm"],
        "profiles_before": profiles,
        "study_dir": study_dir,
    }


def matching_inputs(study_dir: Path, study: Study, *, setup: str, phantom_session: str) -> dict[str, Any]:
    """The arguments of `match_kernel` for a period, from the draft plan, the tables and the resolution records.

    Raises
    ------
    InputError
        If a record or image is missing, or the draft plan gives the period no kernel to match.
    """
    layout = Layout(study)
    draft = read_record(study_dir / layout.draft_plan)
    period = find_period(draft, setup, phantom_session)
    if not is_matched(period):
        raise InputError("draft_plan.json", f"{setup}.{phantom_session} has no kernel to match", "leave it out")
    phantoms, _ = _phantoms(study_dir, study, period)
    loaded: list[LoadedPhantom] = [load_phantom(phantom, study_dir) for phantom in phantoms]
    return {
        "phantoms": loaded,
        "kernel": {direction: period["kernel"][f"{direction}_mm"] for direction in DIRECTIONS},
        "target": {direction: draft["target"][f"{direction}_mm"] for direction in DIRECTIONS},
    }


def _phantoms(study_dir: Path, study: Study, period: dict[str, Any]) -> tuple[list[ProvingPhantom], dict[str, Any]]:
    """The phantoms behind a period's widths, and their fitted profiles as scanned."""
    layout = Layout(study)
    phantoms, profiles = [], {}
    for label, directions in proving_phantoms(period).items():
        row = study.by_phantom[label]
        record = read_record(study_dir / layout.resolution(label))
        profiles[label] = record["fit"].get("profile")
        seen = record["input"]
        identities = (seen["sha256"], seen.get("reference_sha256"))
        phantoms.append(ProvingPhantom(label, row.image, row.kind, row.details, directions, *identities))
    return phantoms, profiles
