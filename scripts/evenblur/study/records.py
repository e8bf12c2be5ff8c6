"""Where each record lies below the results folder, and how to read them all."""

import json
from pathlib import Path
from typing import Any

from evenblur.command import read_record
from evenblur.study.periods import is_matched
from evenblur.study.reading import Study
from evenblur.study.rows import PhantomRow, ScanRow


class Layout:
    """Paths of a study's results, relative to the study folder, `/` between folders.

    Parameters
    ----------
    study
        The study whose results they are.
    """

    def __init__(self, study: Study) -> None:
        self.results = study.settings.results
        self.modality = study.settings.modality

    def intake(self, row: ScanRow | PhantomRow) -> str:
        """Intake record of a scan or a phantom."""
        if isinstance(row, ScanRow):
            return f"{self.results}/intake/scans/{row.entities}.json"
        return f"{self.results}/intake/phantoms/{row.phantom}.json"

    def resolution(self, phantom: str) -> str:
        """Resolution record of a phantom."""
        return f"{self.results}/resolution/{phantom}.json"

    @property
    def plan(self) -> str:
        """The plan."""
        return f"{self.results}/plan.json"

    def prices(self, ending: str) -> str:
        """The prices of the targets, `html` or `tsv`."""
        return f"{self.results}/plan.{ending}"

    @property
    def draft_plan(self) -> str:
        """The plan by quadrature that matching starts from."""
        return f"{self.results}/draft_plan.json"

    def matching(self, setup: str, phantom_session: str) -> str:
        """Matching record of a period."""
        return f"{self.results}/matching/{setup}.{phantom_session}.json"

    @property
    def harmonised(self) -> str:
        """The harmonised data set."""
        return f"{self.results}/harmonised"

    def harmonised_image(self, row: ScanRow) -> str:
        """Harmonised image of a scan."""
        folder = f"{self.harmonised}/sub-{row.subject}/ses-{row.session}/{self.modality}"
        return f"{folder}/{row.entities}_desc-harmonised_{self.modality}.nii.gz"

    def scan_record(self, row: ScanRow) -> str:
        """Record beside the harmonised image of a scan."""
        return self.harmonised_image(row).removesuffix(".nii.gz") + ".json"

    def achieved(self, setup: str, phantom_session: str) -> str:
        """Achieved record of a period."""
        return f"{self.results}/achieved/{setup}.{phantom_session}.json"

    @property
    def site_effect(self) -> str:
        """Record of what differs between sites before and after."""
        return f"{self.results}/site_effect/site_effect.json"

    def regions(self, entities: str) -> str:
        """Record of a scan's regional means."""
        return f"{self.results}/site_effect/regions/{entities}.json"

    def audit(self, name: str) -> str:
        """A file of the audit."""
        return f"{self.results}/audit/{name}"

    @property
    def handover(self) -> str:
        """The bag for the auditor."""
        return f"{self.results}/handover"


def read_matching(study_dir: Path, study: Study) -> dict[str, Any]:
    """Matching records by period (`SETUP.PHANTOMSESSION`), of the periods whose kernel the draft plan lets match.

    Raises
    ------
    InputError
        If a record is missing or damaged.
    """
    layout = Layout(study)
    draft = read_record(study_dir / layout.draft_plan)
    return {
        f"{period['setup']}.{period['phantom_session']}": read_record(
            study_dir / layout.matching(period["setup"], period["phantom_session"])
        )
        for period in draft["periods"]
        if is_matched(period)
    }


def read_intake(study_dir: Path, study: Study) -> dict[str, dict[str, Any]]:
    """Intake records: `scans_intake` by scan key, `phantoms_intake` by phantom label.

    Raises
    ------
    InputError
        If a record is missing or damaged.
    """
    layout = Layout(study)
    return {
        "scans_intake": {row.entities: read_record(study_dir / layout.intake(row)) for row in study.scans},
        "phantoms_intake": {row.phantom: read_record(study_dir / layout.intake(row)) for row in study.phantoms},
    }


def read_plan_inputs(study_dir: Path, study: Study) -> dict[str, dict[str, Any]]:
    """The records that the plan is made from.

    Returns
    -------
    dict
        `scans_intake` by scan key, `phantoms_intake` and `resolution` by phantom label, `outputs`: scan keys by the
        hash of the voxels that an earlier run gave them.

    Raises
    ------
    InputError
        If a record is missing or damaged.
    """
    layout = Layout(study)
    intake = read_intake(study_dir, study)
    return {
        **intake,
        "outputs": _earlier_outputs(study_dir, study),
        "resolution": {
            row.phantom: read_record(study_dir / layout.resolution(row.phantom))
            for row in study.phantoms
            if row.use == "yes" and intake["phantoms_intake"][row.phantom]["sha256"] is not None
        },
    }


def _earlier_outputs(study_dir: Path, study: Study) -> dict[str, str]:
    """Scan keys by the voxels' hash of their harmonised images in the results, as far as smoothing changed them."""
    layout = Layout(study)
    found = {}
    for row in study.scans:
        path = study_dir / layout.scan_record(row)
        try:
            block = json.loads(path.read_text(encoding="utf-8"))["Evenblur"]
            before, after = block["input"]["voxels_sha256"], block["output"]["voxels_sha256"]
        except (OSError, ValueError, KeyError, TypeError):  # not made yet, or no record that tells
            continue
        if before != after:
            found[str(after)] = row.entities
    return found
