"""Pack a finished run for the auditor: every file is asked for by the rows of the study, none is found by looking."""

import json
from collections.abc import Callable
from functools import partial
from pathlib import Path
from typing import Any

import evenblur
from evenblur.audit.tables import table_text
from evenblur.code_identity import code_token
from evenblur.command import read_record
from evenblur.errors import InputError
from evenblur.handover.bag import copied_file, text_file, write_bag
from evenblur.handover.volumes import pack_volume
from evenblur.measuring_kinds import KIND_MODULES
from evenblur.study.dataset import dataset_file_names
from evenblur.study.decision_tasks import serves_regions
from evenblur.study.handover_files import audit_files, decision_files
from evenblur.study.history import HISTORY_NAME
from evenblur.study.periods import is_matched, is_proved
from evenblur.study.reading import Study, load_study, resolved
from evenblur.study.records import Layout
from evenblur.study.rows import PhantomRow, ScanRow

STEPS = (
    "take_in_image.py",
    "measure_resolution.py",
    "make_plan.py",
    "match_kernel.py",
    "smooth_scan.py",
    "measure_achieved.py",
    "record_history.py",
    "make_audit_tables.py",
    "make_pictures.py",
    "make_report.py",
    "make_handover.py",
)
"""Steps whose code the bag names."""

IMAGES_COLUMNS = ("item", "key", "path", "sha256", "voxels_sha256", "packed")

README = """\
What this bag holds
===================

It is a BagIt bag (RFC 8493). Any tool for bags verifies it, and so does `sha256sum --check manifest-sha256.txt`.
`python scripts/check_handover.py BAG` of the program recomputes the tables as well; with `--study STUDY` it smooths
scans again by another route.

study.json            the study's settings and tables as they were resolved
history.tsv           what changed in the study, each line bound to the one before by its hash
images.tsv            every image with its hashes; what is packed stands in its last column
phantoms/             the phantoms' volumes: voxels and grid as measured, no other part of their headers
results/plan.json     target, kernels, accepted and held scans
results/plan.tsv      what each target would cost (plan.html shows it)
results/intake/       what each image is
results/resolution/   each phantom's width and fit
results/matching/     matched kernels, if the study matches them
results/achieved/     each period's phantom after its kernel
results/harmonised/   each accepted scan's record (its image only if the study says so)
results/site_effect/  what differs between sites before and after: site_effect.json, each scan's regional means
results/audit/        the tables (covariates.tsv is for statistics packages), the report, each site's own record
program/              the packages' versions, the identity of the code, what audit.json and the sites' records hold

For research, not for reading patients' images. The subjects' images as the sites sent them stay with the study.
"""

Payload = dict[str, Callable[[Path], object]]


def pack_handover(study_dir: Path, *, program_dir: Path, day: str) -> Path:
    """Pack the results of a study's run into the bag `handover` of its results folder.

    Parameters
    ----------
    study_dir
        The study folder, its run finished up to the audit.
    program_dir
        The program's folder, with `scripts/` and `envs/`.
    day
        The bag's date, year-month-day.

    Returns
    -------
    Path
        The bag.

    Raises
    ------
    InputError
        If a record is missing or damaged, or an image changed since the run looked at it.
    """
    study = load_study(study_dir)
    layout = Layout(study)
    plan = read_record(study_dir / layout.plan)
    intake = {row.phantom: read_record(study_dir / layout.intake(row)) for row in study.phantoms}
    payload: Payload = {
        "README.txt": text_file(README),
        "study.json": text_file(_json({**resolved(study), "regions": _regions(study)})),
        HISTORY_NAME: copied_file(study_dir / HISTORY_NAME),
        "program/pins.txt": copied_file(program_dir / "envs" / "run.txt"),
        "program/code.json": text_file(_json(_code(program_dir))),
        "program/audit.schema.json": copied_file(program_dir / "workflow" / "schemas" / "audit.schema.json"),
        "program/site.schema.json": copied_file(program_dir / "workflow" / "schemas" / "site.schema.json"),
    }
    for name in _result_files(study_dir, study, plan, intake):
        payload[f"results/{name.removeprefix(layout.results + '/')}"] = copied_file(study_dir / name)
    volumes = _volumes(study_dir, study, intake)
    payload |= {name: partial(_pack, study_dir, volume) for name, volume in volumes.items()}
    images = _image_rows(study_dir, study, plan, intake, volumes)
    payload["images.tsv"] = text_file(table_text(IMAGES_COLUMNS, images))
    target = study_dir / layout.handover
    write_bag(target, payload=dict(sorted(payload.items())), info=_info(study, day))
    return target


def _info(study: Study, day: str) -> dict[str, str]:
    made_up = " All data are invented." if study.settings.demo else ""
    return {
        "External-Description": f"{study.settings.study.title}: record of the harmonisation of resolution.{made_up}",
        "Bagging-Date": day,
        "Bag-Software-Agent": f"evenblur {evenblur.__version__}",
    }


def _json(content: Any) -> str:
    return json.dumps(content, indent=2, ensure_ascii=False, allow_nan=False) + "\n"


def _code(program_dir: Path) -> dict[str, Any]:
    scripts, kinds = program_dir / "scripts", tuple(sorted(KIND_MODULES.values()))
    steps = {name: code_token(scripts, files=[name]) for name in STEPS}
    return {
        "name": "evenblur",
        "version": evenblur.__version__,
        "steps": steps,
        "phantoms": {name: code_token(scripts, modules=[name]) for name in kinds},
    }


def _result_files(study_dir: Path, study: Study, plan: dict[str, Any], intake: dict[str, Any]) -> list[str]:
    """Results to pack, relative to the study folder."""
    layout = Layout(study)
    rows: list[PhantomRow | ScanRow] = [*study.phantoms, *study.scans]
    names = [layout.plan, *(layout.intake(row) for row in rows)]
    names += [layout.resolution(row.phantom) for row in study.phantoms if _measured(row, intake)]
    if study.settings.kernel == "matched":
        draft = read_record(study_dir / layout.draft_plan)
        names += [layout.draft_plan, *(layout.matching(*_period(p)) for p in draft["periods"] if is_matched(p))]
    names += [layout.achieved(*_period(period)) for period in plan["periods"] if is_proved(period)]
    names += [f"{layout.harmonised}/{name}" for name in dataset_file_names(study.settings)]
    for row in _accepted(study, plan):
        names.append(layout.scan_record(row))
        if study.settings.handover.include_images:
            names.append(layout.harmonised_image(row))
        if serves_regions(study, row):
            names.append(layout.regions(row.entities))
    return names + decision_files(study) + audit_files(study)


def _regions(study: Study) -> list[dict[str, Any]]:
    return [row.model_dump(mode="json") for row in study.regions]


def _period(period: dict[str, Any]) -> tuple[str, str]:
    return period["setup"], period["phantom_session"]


def _measured(row: PhantomRow, intake: dict[str, Any]) -> bool:
    return row.use == "yes" and intake[row.phantom]["sha256"] is not None


def _accepted(study: Study, plan: dict[str, Any]) -> list[ScanRow]:
    return [study.by_entities[scan["entities"]] for scan in plan["scans"] if scan["status"] == "accepted"]


Volume = dict[str, str | None]


def _volumes(study_dir: Path, study: Study, intake: dict[str, Any]) -> dict[str, Volume]:
    """Phantoms' volumes to pack, and the references beside them, by their names in the bag."""
    layout = Layout(study)
    volumes: dict[str, Volume] = {}
    for row in study.phantoms:
        seen = intake[row.phantom]
        if seen["voxels_sha256"] is None:
            continue
        hashes = {"sha256": seen["sha256"], "voxels_sha256": seen["voxels_sha256"]}
        volumes[f"phantoms/{row.phantom}.nii.gz"] = {"name": row.image, **hashes}
        if "reference" not in row.details or not _measured(row, intake):
            continue
        record = read_record(study_dir / layout.resolution(row.phantom))
        if record["in_plane"] is not None or record["axial"] is not None:  # else the reference may be what is wrong
            identity = record["input"].get("reference_sha256")
            reference = {"name": row.details["reference"], "sha256": identity, "voxels_sha256": None}
            volumes[f"phantoms/{row.phantom}_reference.nii.gz"] = reference
    return volumes


def _pack(study_dir: Path, volume: Volume, out: Path) -> None:
    name = str(volume["name"])
    if not (study_dir / name).exists():
        raise InputError(name, "the image vanished during the run", "run again")
    pack_volume(
        study_dir / name,
        name=name,
        out=out,
        sha256=str(volume["sha256"]),
        voxels_sha256=volume["voxels_sha256"],
    )


def _image_rows(
    study_dir: Path, study: Study, plan: dict[str, Any], intake: dict[str, Any], volumes: dict[str, Volume]
) -> list[dict[str, Any]]:
    """Rows of images.tsv: phantoms, their references, scans as sent, scans as harmonised."""
    layout = Layout(study)
    rows = []
    for row in study.phantoms:
        packed = f"phantoms/{row.phantom}.nii.gz"
        rows.append(_image_row("phantom", row.phantom, row.image, intake[row.phantom], packed in volumes and packed))
        packed = f"phantoms/{row.phantom}_reference.nii.gz"
        if packed in volumes:
            rows.append(_image_row("reference", row.phantom, row.details["reference"], volumes[packed], packed))
    for scan in study.scans:
        record = read_record(study_dir / layout.intake(scan))
        rows.append(_image_row("scan", scan.entities, scan.image, record, ""))
    for scan in _accepted(study, plan):
        output = read_record(study_dir / layout.scan_record(scan))["Evenblur"]["output"]
        image = layout.harmonised_image(scan)
        inside = f"results/{image.removeprefix(layout.results + '/')}"
        packed = inside if study.settings.handover.include_images else ""
        rows.append(_image_row("harmonised", scan.entities, image, output, packed))
    return rows


def _image_row(item: str, key: str, path: str, hashes: dict[str, Any], packed: str | bool) -> dict[str, Any]:
    cells = (item, key, path, hashes["sha256"], hashes["voxels_sha256"], packed or "")
    return dict(zip(IMAGES_COLUMNS, cells, strict=True))
