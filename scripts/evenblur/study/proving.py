"""What the achieved width of a period is measured from."""

from pathlib import Path
from typing import Any

from evenblur.achieving import ProvingPhantom
from evenblur.command import read_record
from evenblur.errors import InputError
from evenblur.study.periods import find_period, is_proved, proving_phantoms
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
    phantoms, profiles = [], {}
    for label, directions in proving_phantoms(period).items():
        row = study.by_phantom[label]
        record = read_record(study_dir / layout.resolution(label))
        profiles[label] = record["fit"].get("profile")
        sha256 = record["input"]["sha256"]
        phantoms.append(ProvingPhantom(label, row.image, row.kind, row.details, directions, sha256))
    return {
        "phantoms": phantoms,
        "in_plane_mm": period["kernel"]["in_plane_mm"],
        "axial_mm": period["kernel"]["axial_mm"],
        "profiles_before": profiles,
        "study_dir": study_dir,
    }
