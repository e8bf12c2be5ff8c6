"""Gather the records of a run into one structure; only here does the audit read the results folder."""

import os
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from functools import cached_property
from pathlib import Path
from typing import Any, TypeVar

from evenblur.command import read_record
from evenblur.study.reading import load_study, resolved

Row = Mapping[str, Any]
Key = TypeVar("Key")

# What BIDS itself asks for or allows beside the subjects' folders.
_DATASET_FILES = frozenset({"dataset_description.json", ".bidsignore", "README", "README.md"})


@dataclass(frozen=True)
class AuditInput:
    """Everything that the audit looks at, as plain data.

    `settings` is study.yaml as resolved; `setups`, `phantoms`, `scans` are the tables' rows; the records are keyed
    by phantom, by (setup, phantom session), or by a scan's entities. `harmonised_files` are the paths of all files
    under the harmonised folder, relative to the study folder; `history_problems` are findings that another hand
    changed the study's log.
    """

    settings: Mapping[str, Any]
    setups: tuple[Row, ...]
    phantoms: tuple[Row, ...]
    scans: tuple[Row, ...]
    plan: Mapping[str, Any]
    resolution: Mapping[str, Row] = field(default_factory=dict)
    intake_phantoms: Mapping[str, Row] = field(default_factory=dict)
    intake_scans: Mapping[str, Row] = field(default_factory=dict)
    achieved: Mapping[tuple[str, str], Row] = field(default_factory=dict)
    scan_records: Mapping[str, Row] = field(default_factory=dict)
    harmonised_files: tuple[str, ...] = ()
    history_problems: tuple[str, ...] = ()
    site_effect: Row = field(default_factory=dict)

    @cached_property
    def by_setup(self) -> dict[str, Row]:
        """The setups' rows by label; thousands of scans ask for theirs."""
        return {str(row["setup"]): row for row in self.setups}


def scan_entities(row: Row) -> str:
    """The key of a row of the scans' table: `sub-S_ses-T[_trc-..][_run-..]`.

    >>> scan_entities({"subject": "q01", "session": "base", "tracer": None, "run": 1})
    'sub-q01_ses-base_run-1'
    """
    parts = [("sub", "subject"), ("ses", "session"), ("trc", "tracer"), ("run", "run")]
    return "_".join(f"{short}-{row[name]}" for short, name in parts if row.get(name) not in (None, ""))


def harmonised_image(scan: Row, *, settings: Mapping[str, Any]) -> str:
    """Path of a scan's harmonised image, relative to the study folder.

    >>> scan = {"subject": "q01", "session": "base", "entities": "sub-q01_ses-base"}
    >>> harmonised_image(scan, settings={"modality": "pet", "results": "results"})
    'results/harmonised/sub-q01/ses-base/pet/sub-q01_ses-base_desc-harmonised_pet.nii.gz'
    """
    kind = settings.get("modality", "pet")
    folder = f"{settings.get('results', 'results')}/harmonised/sub-{scan['subject']}/ses-{scan['session']}/{kind}"
    return f"{folder}/{scan['entities']}_desc-harmonised_{kind}.nii.gz"


def sidecar(image: str) -> str:
    """Path of the record beside a harmonised image.

    >>> sidecar("a/b_pet.nii.gz")
    'a/b_pet.json'
    """
    return image.removesuffix(".nii.gz") + ".json"


def accepted(plan: Mapping[str, Any]) -> list[Row]:
    """The plan's accepted scans, in its order."""
    return [scan for scan in plan.get("scans", []) if scan["status"] == "accepted"]


def stray_files(audit: AuditInput) -> list[str]:
    """Files under the harmonised folder that no accepted row stands for, sorted."""
    root = f"{audit.settings.get('results', 'results')}/harmonised"
    expected = {f"{root}/{name}" for name in _DATASET_FILES}
    for scan in accepted(audit.plan):
        image = harmonised_image(scan, settings=audit.settings)
        expected |= {image, sidecar(image)}
    return sorted(set(audit.harmonised_files) - expected)


def faults(audit: AuditInput) -> list[str]:
    """What is wrong with the harmonised folder besides stray files: sentences, in the plan's order.

    An accepted scan must have its image and its record, made from the image that the plan names and with the
    kernel of its period.
    """
    files = set(audit.harmonised_files)
    kernels = {(p["setup"], p["phantom_session"]): p.get("kernel") or {} for p in audit.plan.get("periods", [])}
    sentences = []
    for scan in accepted(audit.plan):
        name, image = scan["entities"], harmonised_image(scan, settings=audit.settings)
        missing = [*(["image"] if image not in files else []), *(["record"] if name not in audit.scan_records else [])]
        if missing:
            sentences.append(f"Scan {name} is accepted, but it has no harmonised {' and no '.join(missing)}.")
        if name not in audit.scan_records:
            continue
        record = audit.scan_records[name].get("Evenblur") or {}
        made_from = (record.get("input") or {}).get("sha256")
        if made_from and scan.get("sha256") and made_from != scan["sha256"]:
            sentences.append(f"Scan {name} was smoothed from another image than the plan names.")
        applied, planned = record.get("kernel") or {}, kernels.get((scan["setup"], scan["phantom_session"]), {})
        if any(_differ(applied.get(key), planned.get(key)) for key in ("in_plane_mm", "axial_mm")):
            sentences.append(f"Scan {name} was smoothed with another kernel than the plan gives its period.")
    return sentences


def _differ(first: float | None, second: float | None) -> bool:
    return abs((first or 0.0) - (second or 0.0)) > 1e-4  # records keep kernels to 0.0001 mm


def load_audit_input(
    study_dir: Path, study: Mapping[str, Any], setups: Iterable[Row], phantoms: Iterable[Row], scans: Iterable[Row]
) -> AuditInput:
    """Read the records of a run. A record that the run did not write is simply not there.

    Parameters
    ----------
    study_dir
        The study folder.
    study
        study.yaml as resolved, as plain data.
    setups, phantoms, scans
        The tables' rows, as plain data.

    Raises
    ------
    InputError
        If the plan is missing, or a record that is there cannot be read.
    """
    results = study_dir / str(study.get("results", "results"))
    plan = read_record(results / "plan.json")
    phantom_rows = tuple(phantoms)
    labels = [str(row["phantom"]) for row in phantom_rows]
    # A period that is left out has no achieved width; a record from before it was is no longer true.
    proved = [p for p in plan.get("periods", []) if p["status"] in ("smooth", "at_target")]
    periods = [(str(p["setup"]), str(p["phantom_session"])) for p in proved]
    entities = [str(scan["entities"]) for scan in plan.get("scans", [])]
    sidecars = {
        str(scan["entities"]): study_dir / sidecar(harmonised_image(scan, settings=study)) for scan in accepted(plan)
    }
    return AuditInput(
        settings=study,
        setups=tuple(setups),
        phantoms=phantom_rows,
        scans=tuple(scans),
        plan=plan,
        resolution=_records({label: results / "resolution" / f"{label}.json" for label in labels}),
        intake_phantoms=_records({label: results / "intake" / "phantoms" / f"{label}.json" for label in labels}),
        intake_scans=_records({name: results / "intake" / "scans" / f"{name}.json" for name in entities}),
        achieved=_records({key: results / "achieved" / f"{key[0]}.{key[1]}.json" for key in periods}),
        scan_records=_records(sidecars),
        harmonised_files=_files_below(results / "harmonised", study_dir=study_dir),
        history_problems=_history_problems(results / "audit" / "history.json"),
        site_effect=_records({"": results / "site_effect" / "site_effect.json"}).get("", {}),
    )


def _history_problems(path: Path) -> tuple[str, ...]:
    return tuple(read_record(path).get("problems") or ()) if path.is_file() else ()


def _records(paths: Mapping[Key, Path]) -> dict[Key, Row]:
    return {key: read_record(path) for key, path in paths.items() if path.is_file()}


def _files_below(folder: Path, *, study_dir: Path) -> tuple[str, ...]:
    found = [Path(where, name) for where, _, names in os.walk(folder) for name in names]
    return tuple(sorted(path.relative_to(study_dir).as_posix() for path in found))


def audit_of_study(study_dir: Path) -> AuditInput:
    """Read a study folder's settings and tables, then the records of its run.

    Raises
    ------
    InputError
        If the study's files or records cannot be used.
    """
    study = resolved(load_study(study_dir))
    return load_audit_input(study_dir, study["settings"], study["setups"], study["phantoms"], study["scans"])
