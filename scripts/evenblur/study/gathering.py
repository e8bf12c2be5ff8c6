"""The parts of a study that a cluster takes as one submission each, and the settings of the step that gathers each.

A scan's smoothing or intake takes about a second, a submission several. Jobs that a gathering step connects are
submitted, started and recorded together. The step looks at what the others of its part wrote: records, and images
against the hashes that the records state. Where no cluster is asked for, nothing is gathered.
"""

import hashlib
import json
from collections.abc import Callable
from typing import Any

from evenblur.study.decision_tasks import regional_records
from evenblur.study.parts import cut_into_parts
from evenblur.study.tasks import Settings, Tasks

FOLDER = ".evenblur/gathered"
"""Notes on the work of a run, not results: they say nothing that the records do not say."""


class Parts:
    """The parts of a study.

    Parameters
    ----------
    tasks
        The steps of the study.
    most
        How many members a part may have; None where no parts are made.
    """

    def __init__(self, tasks: Tasks, most: int | None) -> None:
        self._tasks = tasks
        self._most = most
        self._cut: dict[str, dict[str, list[str]]] = {}
        self._cut_from: dict[str, Any] = {}
        self._by_period: dict[str, dict[str, list[str]]] = {}

    # --- intake: parts of all scans, and of all phantoms

    def intake_notes(self) -> list[str]:
        """What the gathering steps of the intake write."""
        groups = ("scans", "phantoms") if self._most is not None else ()
        return [f"{FOLDER}/intake/{group}.{part}.json" for group in groups for part in self._intake(group)]

    def intake_records(self, group: str, part: str) -> list[str]:
        """Intake records of a part."""
        return [self._tasks.layout.intake(self._row(group, key)) for key in self._intake(group).get(part, [])]

    def intake_settings(self, group: str, part: str) -> Settings:
        """Settings of gathering a part of the intake: they change when those of a member do."""
        members = self._intake(group).get(part, [])
        return self._settings(members, lambda key: self._tasks.intake_settings(group, key))

    def _intake(self, group: str) -> dict[str, list[str]]:
        if group not in self._cut:
            keys = self._tasks.scans if group == "scans" else self._tasks.phantoms
            self._cut[group] = cut_into_parts(keys, most=self._most or len(keys) or 1)
        return self._cut[group]

    def _row(self, group: str, key: str) -> Any:
        return self._tasks.scans[key] if group == "scans" else self._tasks.phantoms[key]

    # --- smoothing: parts of each period's scans

    def scan_notes(self, plan_file: str, sites: list[str]) -> list[str]:
        """What the gathering steps of the smoothing write, for these sites or, where none is named, for all."""
        if self._most is None:
            return []
        periods = self._periods(plan_file)
        chosen = [name for name in periods if not sites or self._site(name.partition(".")[0]) in sites]
        return [f"{FOLDER}/harmonised/{name}.{part}.json" for name in chosen for part in periods[name]]

    def scan_records(self, period: str, part: str, plan_file: str) -> list[str]:
        """Records of the scans of a period's part (`SETUP.PHANTOMSESSION`)."""
        members = self._periods(plan_file).get(period, {}).get(part, [])
        return [self._tasks.layout.scan_record(self._tasks.scans[key]) for key in members]

    def region_records(self, period: str, part: str, plan_file: str) -> list[str]:
        """Records of the regional means of a period's part; none for scans that the table of regions leaves out."""
        members = self._periods(plan_file).get(period, {}).get(part, [])
        return regional_records(self._tasks, members)

    def scan_settings(self, period: str, part: str, plan_file: str) -> Settings:
        """Settings of gathering a part of a period's scans: they change when those of a member do."""
        members = self._periods(plan_file).get(period, {}).get(part, [])
        return self._settings(members, lambda key: self._tasks.smoothing_settings(key, plan_file))

    def _periods(self, plan_file: str) -> dict[str, dict[str, list[str]]]:
        plan = self._tasks.plan(plan_file)
        if self._cut_from is not plan:
            self._cut_from = plan
            members: dict[str, list[str]] = {}
            for key, session in self._tasks.sessions(plan_file).items():
                if key in self._tasks.scans:
                    members.setdefault(f"{self._tasks.scans[key].setup}.{session}", []).append(key)
            self._by_period = {
                name: cut_into_parts(keys, most=self._most or len(keys)) for name, keys in members.items()
            }
        return self._by_period

    def _site(self, setup: str) -> str:
        return self._tasks.study.by_setup[setup].site

    def _settings(self, members: list[str], of: Callable[[str], Settings]) -> Settings:
        states = json.dumps({key: of(key) for key in members}, sort_keys=True)
        code = self._tasks.code_of("gather_records.py")
        return {"code": code, "members": hashlib.sha256(states.encode()).hexdigest()}
