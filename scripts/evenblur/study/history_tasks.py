"""What the recording of the history depends on, and the statements at the beginning and the end of a run."""

import json
from pathlib import Path
from typing import IO, Any

import evenblur
from evenblur.code_identity import code_token
from evenblur.command import read_record, write_text
from evenblur.errors import InputError
from evenblur.measuring_kinds import KIND_MODULES
from evenblur.study.changes import after_work, before_work
from evenblur.study.drafts import clear_drafts
from evenblur.study.history import HISTORY_NAME, State, disagreements, entries, fold, told_disagreements
from evenblur.study.orphans import find_orphans, orphans_sentence
from evenblur.study.state import PROGRAM, plan_state, study_state
from evenblur.study.tasks import Tasks

_STEPS = ("take_in_image", "measure_resolution", "make_plan", "match_kernel", "smooth_scan", "measure_achieved")
STATEMENT_NAME = ".evenblur/logs/changes.txt"


class Chronicle:
    """What a run says about changes.

    Parameters
    ----------
    tasks
        The study's steps.
    study_dir, program_dir
        The study folder and the folder of the program.
    """

    def __init__(self, tasks: Tasks, study_dir: Path, program_dir: Path) -> None:
        self._tasks = tasks
        self._study_dir = study_dir
        self._scripts = program_dir / "scripts"
        self._file = study_dir / HISTORY_NAME
        self._recorded: State | None = None

    def program(self) -> dict[str, str]:
        """The program's version and the code identity of each step whose code decides about results."""
        modules = {"measure_resolution": tuple(sorted(KIND_MODULES.values()))}
        steps = ("make_demonstration", *_STEPS) if self._tasks.study.settings.demo else _STEPS
        return {
            "version": evenblur.__version__,
            **{step: code_token(self._scripts, files=(f"{step}.py",), modules=modules.get(step, ())) for step in steps},
        }

    def found(self) -> list[str]:
        """Findings that another hand changed the history."""
        return disagreements(self._study_dir, self._study_dir / self._tasks.layout.audit("history.json"))

    def settings(self, plan_file: str) -> dict[str, Any]:
        """Settings of the step that records the history: what is recorded, and whether it still stands."""
        audit = self._tasks.audit_settings(plan_file)
        return {
            "code": code_token(self._scripts, files=("record_history.py",)),
            "found": json.dumps(self.found()),
            "intake": audit["intake"],
            "plan": audit["plan"],
            "program": json.dumps(self.program()),
            "study": audit["study"],
        }

    def now(self) -> State:
        """Settings, tables, image identities and code as they are."""
        return {**study_state(self._tasks.study, digest=self._tasks.digest), PROGRAM: self.program()}

    def recorded(self) -> State:
        """What the history comes to."""
        return fold(entries(self._file))

    def since(self) -> str:
        """The day of the last line, empty without any."""
        found = entries(self._file)
        return found[-1][0] if found else ""

    def before(self) -> list[str]:
        """What changed since the last recorded state; keeps that state for the end of the run."""
        self._recorded = self.recorded()
        return before_work(self._recorded, self.now()) or [
            "nothing changed in study files, images or code that decides"
        ]

    def planned(self) -> list[str]:
        """What the plan that stands does to target, kernels and scans, against the last recorded state."""
        plan = self._plan()
        if plan is None:
            return []
        return after_work(self.recorded(), {**study_state(self._tasks.study), **self._with_rows(plan)}, done=False)

    def after(self) -> list[str]:
        """What the run did, against the state that was recorded when it began."""
        old, new = self._recorded or {}, self.recorded()
        if new != old:
            said = after_work(old, new, done=True) or ["target, kernels and scans are as they were"]
        elif planned := self.planned():
            said = [*planned, "the history is written once all scans are smoothed"]
        else:
            said = ["target, kernels and scans are as they were"]
        return [*said, *self.orphans()]

    def orphans(self) -> list[str]:
        """A line about results that no row stands for; nothing where there are none."""
        plan = self._plan()
        found = find_orphans(self._study_dir, self._tasks.study, plan) if plan is not None else []
        return [orphans_sentence(found)] if found else []

    def explained(self) -> list[str]:
        """What changed and what follows, told without running anything and without writing anything."""
        recorded, told = self.recorded(), set(told_disagreements(self._study_dir))
        lines = [sentence for sentence in self.found() if sentence not in told]
        changed = before_work(recorded, self.now())
        lines += self._dated(changed)
        planned = self.planned()
        lines += [f"The plan that stands: {sentence}" for sentence in planned]
        if not changed and not planned:
            lines.append(f"Nothing changed since {self.since()}.")
        elif changed and recorded and not planned:
            lines.append("The plan is still the one that was recorded; the target `plan` shows what follows.")
        return lines + [sentence[0].upper() + sentence[1:] + "." for sentence in self.orphans()]

    def tell_before(self, stream: IO[str]) -> None:
        """Say before the work what changed, and begin the run's statement among the logs.

        Drafts that a killed run left are cleared first: no other run works on the study now.
        """
        clear_drafts(self._study_dir, self._tasks.layout.results)
        told = set(told_disagreements(self._study_dir))
        news = [sentence for sentence in self.found() if sentence not in told]
        self._tell([*news, *self._dated(self.before())], stream, anew=True)

    def tell_after(self, stream: IO[str]) -> None:
        """Say after the work what it did."""
        self._tell([f"This run: {line}" for line in self.after()], stream, anew=False)

    def _tell(self, lines: list[str], stream: IO[str], *, anew: bool) -> None:
        for line in lines:
            print(line, file=stream)
        path = self._study_dir / STATEMENT_NAME
        try:
            old = path.read_text(encoding="utf-8") if path.is_file() and not anew else ""
            write_text(path, old + "".join(f"{line}\n" for line in lines))
        except OSError as error:
            print(f"{STATEMENT_NAME} could not be written ({error.strerror}).", file=stream)

    def _dated(self, sentences: list[str]) -> list[str]:
        since = self.since()
        return [f"Since {since}: {line}" if since else line[0].upper() + line[1:] for line in sentences]

    def _plan(self) -> dict[str, Any] | None:
        try:
            plan = read_record(self._study_dir / self._tasks.layout.plan)
        except InputError:
            return None
        return plan if {"target", "periods", "scans"} <= plan.keys() else None

    def _with_rows(self, plan: dict[str, Any]) -> State:
        rows = study_state(self._tasks.study)
        return {item: {**rows.get(item, {}), **fields} for item, fields in plan_state(plan).items()}
