"""What every step of a study depends on: the one dict of settings that decides whether its results still hold.

A rule of the workflow takes its settings from here and nowhere else. Each dict is plain (text, numbers, sorted keys),
so that it can be stored and compared; it names the identity of the images and of the code that the step works with.
"""

import hashlib
import json
import os
from pathlib import Path
from typing import Any
from urllib.parse import quote

from evenblur.code_identity import code_token
from evenblur.images.extent import Extent
from evenblur.images.sidecars import sidecar_path
from evenblur.measuring_kinds import KIND_MODULES
from evenblur.study.dataset import dataset_file_names
from evenblur.study.ledger import MISSING, UNREADABLE, Ledger
from evenblur.study.periods import find_period, is_matched, is_proved, proving_phantoms
from evenblur.study.reading import STUDY_FILE, Study, resolved
from evenblur.study.records import Layout
from evenblur.study.rows import SCALE_DETAILS, PhantomRow, ScanRow

Settings = dict[str, Any]

_NO_IMAGE = frozenset({MISSING, UNREADABLE})
_MADE = "made by the demonstration"


class Tasks:
    """The steps of a study and the settings of each.

    Parameters
    ----------
    study
        The study.
    ledger
        Identities of its images.
    study_dir
        The study folder.
    program_dir
        The folder of the program (it holds `scripts/` and `workflow/`).
    """

    def __init__(self, study: Study, ledger: Ledger, study_dir: Path, program_dir: Path) -> None:
        self.study = study
        self.layout = Layout(study)
        self.phantoms = {row.phantom: row for row in study.phantoms}
        self.scans = {row.entities: row for row in study.scans}
        self._ledger = ledger
        self._study_dir = study_dir
        self._program_dir = program_dir
        self._tokens: dict[tuple[str, ...], str] = {}
        self._plans: dict[str, dict[str, Any]] = {}
        self._accepted_of: dict[str, Any] | None = None
        self._accepted: dict[str, str] = {}
        self._intake = ""
        self._strays_of: dict[str, Any] | None = None
        self._found_strays: list[str] = []
        self._made = _demonstration_files() if study.settings.demo else frozenset()

    # --- identities

    def look_at_images(self) -> None:
        """Look at every image of the tables now and store the ledger, so that all jobs of a run agree on them."""
        rows: list[ScanRow | PhantomRow] = [*self.study.phantoms, *self.study.scans]
        for row in rows:
            self.extent(row.image)
            self._sidecar(row.image)
            if isinstance(row, PhantomRow) and "reference" in row.details:
                self.extent(row.details["reference"])
            if isinstance(row, ScanRow):
                for name in self.region_images(row):
                    self.extent(name)
        self._ledger.save()

    def image(self, name: str) -> list[str]:
        """The image as a rule's input: its path, or nothing where there is none to read.

        An image that went away during the run is none either: a missing input would stop everybody's jobs, so its own
        job finds out and fails alone.
        """
        there = name in self._made or os.path.exists(self._study_dir / name)  # noqa: PTH110 - any error means no
        return [name] if there and self._expected(name) not in _NO_IMAGE else []

    def extent(self, name: str) -> Extent | None:
        """Voxels and frames of an image; None for one that is yet to be made."""
        return None if name in self._made else self._ledger.extent(name)

    def digest(self, name: str) -> str | None:
        """Identity of an image as it is before a run; None for one that the demonstration makes."""
        return None if name in self._made else self._ledger.digest(name)

    def demonstration_files(self) -> list[str]:
        """Images and sidecars that the demonstration makes, sorted; none in other studies."""
        return sorted(self._made)

    def _expected(self, name: str) -> str:
        """The hash that a step must find, `missing`, `unreadable`, or nothing for an image that is yet to be made."""
        return "" if name in self._made else self._ledger.digest(name)

    def _identity(self, name: str) -> str:
        if name in self._made:
            return f"{_MADE} {self.code('make_demonstration.py')}"
        return self._ledger.digest(name)

    def _sidecar(self, name: str) -> str:
        """Identity of the sidecar beside an image; the harmonised image inherits some of its fields."""
        return self._identity(sidecar_path(Path(name)).as_posix())

    def code(self, *files: str, modules: tuple[str, ...] = ()) -> str:
        """Identity of the code that step commands run, with these modules besides."""
        key = (*files, *modules)
        if key not in self._tokens:
            self._tokens[key] = code_token(self._program_dir / "scripts", files=files, modules=modules)
        return self._tokens[key]

    def code_of(self, step: str) -> str:
        """Identity of a step command's code."""
        return self.code(step)

    # --- what the settings of further steps are made of (`decision_tasks.py`)

    def study_digest(self) -> str:
        """Identity of the study's own content: settings and tables."""
        return self._study_digest()

    def region_images(self, scan: ScanRow) -> list[str]:
        """Images that mark regions of a scan, each once."""
        names = [row.image_of(scan) for row in self.study.regions if row.serves(scan)]
        return list(dict.fromkeys(name for name in names if name is not None))

    def expected(self, name: str) -> str:
        """The hash that a step must find in an image; see `look_at_images`."""
        return self._expected(name)

    def identity(self, name: str) -> str:
        """What an image's part in a step's settings is."""
        return self._identity(name)

    def page_digest(self, *names: str) -> str:
        """Identity of files of the pages' wording and layout."""
        folder = self._program_dir / "workflow" / "report"
        return _text_digest("".join((folder / name).read_text(encoding="utf-8") for name in names))

    # --- settings of the steps, in the order of the data

    def demonstration_settings(self) -> Settings:
        """Settings of the step that makes the demonstration's images."""
        return {"code": self.code("make_demonstration.py")}

    def intake_settings(self, group: str, key: str) -> Settings:
        """Settings of one image's intake; `group` is `scans` or `phantoms`."""
        row: ScanRow | PhantomRow = self.scans[key] if group == "scans" else self.phantoms[key]
        return {
            "code": self.code("take_in_image.py"),
            "expected": self._expected(row.image),
            "identity": self._identity(row.image),
            "image": row.image,
            "item": group.removesuffix("s"),
            "key": key,
            "sidecar": self._sidecar(row.image),
        }

    def intake_digest(self) -> str:
        """What the intake of all images depends on, as one hash: for steps behind the plan, which comes after it.

        It spares them an input for every image; Snakemake's own work for a step grows with the square of its inputs.
        """
        if not self._intake:
            keys = [*(("scans", key) for key in self.scans), *(("phantoms", key) for key in self.phantoms)]
            found = [self.intake_settings(group, key) for group, key in keys]
            self._intake = _text_digest(json.dumps(found, sort_keys=True))
        return self._intake

    def resolution_settings(self, phantom: str) -> Settings:
        """Settings of one phantom's measurement."""
        row = self.phantoms[phantom]
        module = KIND_MODULES.get(row.kind)
        settings = {
            "code": self.code("measure_resolution.py", modules=(module,) if module else ()),
            "details": json.dumps(_measured_details(row), sort_keys=True),
            "expected": self._expected(row.image),
            "identity": self._identity(row.image),
            "image": row.image,
            "kind": row.kind,
            "phantom": row.phantom,
            "phantom_session": row.phantom_session,
            "setup": row.setup,
        }
        reference = row.details.get("reference")
        expected = self._expected(reference) if reference else ""
        settings["reference_expected"] = "" if expected in _NO_IMAGE else expected
        settings["reference_identity"] = self._identity(reference) if reference else ""
        return dict(sorted(settings.items()))

    def study_files(self) -> list[str]:
        """The files that make the study: settings and tables."""
        tables = self.study.settings.tables
        return [STUDY_FILE, tables.setups, tables.phantoms, tables.scans]

    def dataset_files(self) -> list[str]:
        """Files that describe the harmonised data set."""
        return [f"{self.layout.harmonised}/{name}" for name in dataset_file_names(self.study.settings)]

    def plan_settings(self) -> Settings:
        """Settings of the plan: the study's own content decides."""
        return {"code": self.code("make_plan.py"), "study": self._study_digest()}

    def draft_plan_settings(self) -> Settings:
        """Settings of the draft plan; it depends on what the plan depends on."""
        return {**self.plan_settings(), "draft": "draft"}

    def matching_settings(self, setup: str, phantom_session: str, draft_file: str) -> Settings:
        """Settings of one period's matching, after the draft plan."""
        settings = self._period_settings("match_kernel.py", setup, phantom_session, draft_file)
        target = self.plan(draft_file)["target"]
        return {**settings, "target": f"{target['in_plane_mm']} {target['axial_mm']}"}

    def smoothing_settings(self, entities: str, plan_file: str) -> Settings:
        """Settings of one scan's smoothing, after the plan."""
        row = self.scans[entities]
        plan = self.plan(plan_file)
        period = find_period(plan, row.setup, self.sessions(plan_file)[entities])
        facts = {
            "Sources": [f"bids:raw:{quote(row.image)}"],
            "phantom_session": period["phantom_session"],
            "session": row.session,
            "setup": row.setup,
            "subject": row.subject,
            "target": {name: plan["target"][name] for name in ("axial_mm", "in_plane_mm")},
        }
        return {
            "axial_mm": float(period["kernel"]["axial_mm"]),
            "code": self.code("smooth_scan.py"),
            "expected": self._expected(row.image),
            "facts": json.dumps(facts, sort_keys=True),
            "identity": self._identity(row.image),
            "image": row.image,
            "in_plane_mm": float(period["kernel"]["in_plane_mm"]),
            "sidecar": self._sidecar(row.image),
        }

    def achieved_settings(self, setup: str, phantom_session: str, plan_file: str) -> Settings:
        """Settings of one period's achieved width, after the plan."""
        return self._period_settings("measure_achieved.py", setup, phantom_session, plan_file)

    def _period_settings(self, step: str, setup: str, phantom_session: str, plan_file: str) -> Settings:
        period = find_period(self.plan(plan_file), setup, phantom_session)
        phantoms = {label: self.resolution_settings(label) for label in proving_phantoms(period)}
        return {
            "code": self.code(step, modules=tuple(sorted(self._kind_modules(period)))),
            "directions": json.dumps(period["source_phantoms"], sort_keys=True),
            "kernel": json.dumps(period["kernel"], sort_keys=True),
            "phantom_session": phantom_session,
            "phantoms": json.dumps(phantoms, sort_keys=True),
            "setup": setup,
        }

    def dataset_settings(self) -> Settings:
        """Settings of the harmonised data set's description."""
        return {
            "code": self.code("describe_dataset.py"),
            "results": self.layout.results,
            "title": self.study.settings.study.title,
        }

    def audit_settings(self, plan_file: str) -> Settings:
        """Settings of the audit tables: the study's content and the plan's decide."""
        return {
            "code": self.code("make_audit_tables.py"),
            "intake": self.intake_digest(),
            "plan": _text_digest(json.dumps(self.plan(plan_file), sort_keys=True)),
            "strays": json.dumps(self._strays(plan_file)),
            "study": self._study_digest(),
            "tolerance_mm": float(self.study.settings.tolerance.achieved_mm),
        }

    # --- what the plan asks for

    def plan(self, plan_file: str) -> dict[str, Any]:
        """The plan that stands in a file; read once for each state of the file."""
        path = Path(plan_file)
        found = path.stat()
        state = f"{plan_file} {found.st_mtime_ns} {found.st_size}"
        if state not in self._plans:
            # Plan and draft plan at most: what an earlier state said is of no use.
            self._plans = {key: plan for key, plan in self._plans.items() if not key.startswith(f"{plan_file} ")}
            self._plans[state] = json.loads(path.read_text(encoding="utf-8"))
        return self._plans[state]

    def accepted(self, plan_file: str) -> list[ScanRow]:
        """Scans that the plan accepts and the tables still list, in the table's order."""
        return [self.scans[key] for key in self.sessions(plan_file) if key in self.scans]

    def harmonised(self, plan_file: str) -> list[str]:
        """Both files of every accepted scan."""
        rows = self.accepted(plan_file)
        return [path for row in rows for path in (self.layout.harmonised_image(row), self.layout.scan_record(row))]

    def scan_records(self, plan_file: str) -> list[str]:
        """Records of every accepted scan."""
        return [self.layout.scan_record(row) for row in self.accepted(plan_file)]

    def achieved_records(self, plan_file: str) -> list[str]:
        """Achieved records of every period that has something to measure again."""
        return [
            self.layout.achieved(period["setup"], period["phantom_session"])
            for period in self.plan(plan_file)["periods"]
            if is_proved(period)
        ]

    def matching_records(self, draft_file: str) -> list[str]:
        """Matching records of every period whose kernel can be matched."""
        return [
            self.layout.matching(period["setup"], period["phantom_session"])
            for period in self.plan(draft_file)["periods"]
            if is_matched(period)
        ]

    def proving_images(self, setup: str, phantom_session: str, plan_file: str) -> list[str]:
        """Images that a period's achieved width is measured from."""
        period = find_period(self.plan(plan_file), setup, phantom_session)
        rows = [self.phantoms[label] for label in proving_phantoms(period)]
        names = [row.image for row in rows] + [row.details["reference"] for row in rows if "reference" in row.details]
        return [name for name in names if self.image(name)]

    def proving_records(self, setup: str, phantom_session: str, plan_file: str) -> list[str]:
        """Resolution records of the phantoms behind a period's widths."""
        period = find_period(self.plan(plan_file), setup, phantom_session)
        return [self.layout.resolution(label) for label in proving_phantoms(period)]

    def intake_records(self) -> list[str]:
        """Intake records of every image of the study."""
        rows: list[ScanRow | PhantomRow] = [*self.study.phantoms, *self.study.scans]
        return [self.layout.intake(row) for row in rows]

    def lost_intake(self) -> list[str]:
        """Intake records that are gone although a plan was made from them.

        Snakemake makes a missing file again where a step that runs needs it or a target names it. Naming only those
        that are missing gives the same as naming all, without the work for thousands.
        """
        return self._missing(self.intake_records()) if self._is_file(self.layout.plan) else []

    def lost_harmonised(self, plan_file: str) -> list[str]:
        """Files of accepted scans that are gone; where the history is yet to be recorded, images beside whole records.

        That step asks for every record, and a scan without one is smoothed for it.
        """
        if self._is_file(self.layout.audit("history.json")):
            return self._missing(self.harmonised(plan_file))
        rows = [row for row in self.accepted(plan_file) if self._is_file(self.layout.scan_record(row))]
        return self._missing([self.layout.harmonised_image(row) for row in rows])

    def _missing(self, names: list[str]) -> list[str]:
        return [name for name in names if not self._is_file(name)]

    def _is_file(self, name: str) -> bool:
        return os.path.isfile(f"{self._study_dir}/{name}")  # noqa: PTH113 - called for thousands of files

    def phantom_intake_records(self) -> list[str]:
        """Intake records of the phantoms."""
        return [self.layout.intake(row) for row in self.study.phantoms]

    def resolution_records(self) -> list[str]:
        """Resolution records of every phantom that is in use and has an image."""
        return [
            self.layout.resolution(row.phantom)
            for row in self.study.phantoms
            if row.use == "yes" and self.image(row.image)
        ]

    def sessions(self, plan_file: str) -> dict[str, str]:
        """Phantom session of every accepted scan, by the scan's key."""
        plan = self.plan(plan_file)
        if self._accepted_of is not plan:
            self._accepted_of = plan
            self._accepted = {
                scan["entities"]: scan["phantom_session"] for scan in plan["scans"] if scan["status"] == "accepted"
            }
        return self._accepted

    def _strays(self, plan_file: str) -> list[str]:
        """Files of the harmonised data set that no accepted scan stands for: their coming or going is news."""
        plan = self.plan(plan_file)
        if self._strays_of is not plan:
            self._strays_of = plan
            # Four steps ask, and a large study has thousands of folders: walked once, and without Path objects.
            top = str(self._study_dir)
            found = {
                os.path.relpath(folder, top).replace(os.sep, "/") + f"/{name}"
                for folder, _, names in os.walk(self._study_dir / self.layout.harmonised)
                for name in names
            }
            self._found_strays = sorted(found - set(self.harmonised(plan_file)) - set(self.dataset_files()))
        return self._found_strays

    def _kind_modules(self, period: dict[str, Any]) -> set[str]:
        kinds = {self.phantoms[label].kind for label in proving_phantoms(period)}
        return {KIND_MODULES[kind] for kind in kinds if kind in KIND_MODULES}

    def _study_digest(self) -> str:
        return _text_digest(json.dumps(resolved(self.study), sort_keys=True))


def _measured_details(row: PhantomRow) -> dict[str, Any]:
    """The details that a width depends on."""
    return {name: value for name, value in row.details.items() if name not in SCALE_DETAILS}


def _demonstration_files() -> frozenset[str]:
    from evenblur.demonstration.scenario import demonstration_images, demonstration_sidecars

    return frozenset([*demonstration_images(), *demonstration_sidecars()])


def _text_digest(text: str) -> str:
    return hashlib.sha256(text.encode()).hexdigest()
