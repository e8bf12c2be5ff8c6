"""The content of a bag as data: the study, the plan and the records that the study's rows ask for."""

from dataclasses import dataclass, field
from functools import cached_property
from pathlib import Path
from typing import Any

from evenblur.check.findings import DisagreementError, entry, read_json

DIRECTIONS = ("in_plane", "axial")
Record = dict[str, Any]


@dataclass
class Handover:
    """What a bag holds. Scans are keyed by their entities, periods by `SETUP.PHANTOMSESSION`, phantoms by label."""

    data: Path
    settings: Record
    setups: list[Record]
    phantoms: list[Record]
    scans: list[Record]
    plan: Record
    code: Record
    phantom_intake: dict[str, Record] = field(default_factory=dict)
    scan_intake: dict[str, Record] = field(default_factory=dict)
    resolution: dict[str, Record] = field(default_factory=dict)
    matching: dict[str, Record] = field(default_factory=dict)
    achieved: dict[str, Record] = field(default_factory=dict)
    scan_records: dict[str, Record] = field(default_factory=dict)
    regions: list[Record] = field(default_factory=list)

    @cached_property
    def planned_periods(self) -> dict[str, Record]:
        """The plan's periods by name."""
        return {f"{p['setup']}.{p['phantom_session']}": p for p in self.plan["periods"]}

    @cached_property
    def planned_scans(self) -> dict[str, Record]:
        """The plan's scans by entities."""
        return {scan["entities"]: scan for scan in self.plan["scans"]}

    @cached_property
    def rows(self) -> dict[str, Record]:
        """The study's scans by entities."""
        return {entities(row): row for row in self.scans}

    @cached_property
    def copies(self) -> set[str]:
        """Scans in use that show the same picture as a phantom or as an earlier scan in use."""
        pictures = {record["voxels_sha256"] for record in self.phantom_intake.values()}
        found = set()
        for key, row in self.rows.items():
            own = self.scan_intake[key]
            blank = "image_zero" in own["holds"] or own.get("minimum", 0) is None
            if row["use"] == "no" or not own["voxels_sha256"] or blank:
                continue
            if own["voxels_sha256"] in pictures:
                found.add(key)
            pictures.add(own["voxels_sha256"])
        return found

    def setup(self, label: str) -> Record:
        """A setup's row."""
        for row in self.setups:
            if row["setup"] == label:
                return row
        raise DisagreementError("study.json", f"has no setup {label}")


def entities(row: Record) -> str:
    """A scan's key: its BIDS entities.

    >>> entities({"subject": "a", "session": "b", "tracer": None, "run": "2"})
    'sub-a_ses-b_run-2'
    """
    names = {"sub": "subject", "ses": "session", "trc": "tracer", "run": "run"}
    return "_".join(f"{short}-{row[name]}" for short, name in names.items() if row.get(name))


def output_path(row: Record, settings: Record) -> str:
    """Where a scan's harmonised image lies, relative to the study folder."""
    kind = settings["modality"]
    folder = f"{settings['results']}/harmonised/sub-{row['subject']}/ses-{row['session']}/{kind}"
    return f"{folder}/{entities(row)}_desc-harmonised_{kind}.nii.gz"


def inside(path: str, settings: Record) -> str:
    """The name in the bag of a file of the results, from its path relative to the study folder."""
    return "results/" + path.removeprefix(f"{settings['results']}/")


def load_handover(bag: Path) -> Handover:
    """Read a bag's content by the rows of its study.

    Raises
    ------
    DisagreementError
        If a file that a row asks for is missing or cannot be read.
    """
    data = bag / "data"
    study, plan = read_json(data, "study.json"), read_json(data, "results/plan.json")
    for name in ("settings", "setups", "phantoms", "scans", "regions"):
        if name not in study:
            raise DisagreementError("study.json", f"has no {name}")
    found = Handover(
        data,
        study["settings"],
        study["setups"],
        study["phantoms"],
        study["scans"],
        plan,
        read_json(data, "program/code.json"),
    )
    found.regions = study["regions"]
    for row in found.phantoms:
        label = row["phantom"]
        found.phantom_intake[label] = read_json(data, f"results/intake/phantoms/{label}.json")
        if row["use"] == "yes" and found.phantom_intake[label]["sha256"] is not None:
            found.resolution[label] = read_json(data, f"results/resolution/{label}.json")
    for row in found.scans:
        found.scan_intake[entities(row)] = read_json(data, f"results/intake/scans/{entities(row)}.json")
    _read_periods(found)
    for row in found.scans:
        if entry(found.planned_scans, entities(row), "status") == "accepted":
            name = inside(output_path(row, found.settings), found.settings).removesuffix(".nii.gz") + ".json"
            found.scan_records[entities(row)] = read_json(data, name)["Evenblur"]
    return found


def _read_periods(found: Handover) -> None:
    for name, period in found.planned_periods.items():
        if period["status"] in ("smooth", "at_target") and any(period["source_phantoms"].values()):
            found.achieved[name] = read_json(found.data, f"results/achieved/{name}.json")
    if found.settings["kernel"] == "matched":
        for period in read_json(found.data, "results/draft_plan.json")["periods"]:
            if period["status"] == "smooth" and any(period["source_phantoms"].values()):
                name = f"{period['setup']}.{period['phantom_session']}"
                found.matching[name] = read_json(found.data, f"results/matching/{name}.json")
