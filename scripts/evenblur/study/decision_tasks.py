"""Settings of the steps that prepare and check decisions: the price of the target, the effect of the sites."""

import hashlib
import json
from collections.abc import Iterable
from pathlib import Path
from typing import Any

from evenblur.images.sidecars import sidecar_path
from evenblur.study.periods import is_proved, proving_phantoms
from evenblur.study.reading import Study
from evenblur.study.rows import SCALE_DETAILS, ScanRow
from evenblur.study.tasks import Settings, Tasks


def price_settings(tasks: Tasks, plan_file: str) -> Settings:
    """Settings of the prices: the study's content, the plan's, and the page's layout decide."""
    return {
        "code": tasks.code("price_targets.py"),
        "intake": tasks.intake_digest(),
        "layout": tasks.page_digest("plan.html.j2", "style.css"),
        "plan": _digest(tasks.plan(plan_file)),
        "study": tasks.study_digest(),
    }


def regional_scans(tasks: Tasks, plan_file: str) -> list[ScanRow]:
    """Accepted scans that the table of regions is about."""
    return [row for row in tasks.accepted(plan_file) if serves_regions(tasks.study, row)]


def serves_regions(study: Study, row: ScanRow) -> bool:
    """Whether the study's table of regions is about this scan."""
    return any(region.serves(row) for region in study.regions)


def region_records(tasks: Tasks, plan_file: str) -> list[str]:
    """Records of the regional means of every accepted scan; none without a table of regions."""
    return [tasks.layout.regions(row.entities) for row in regional_scans(tasks, plan_file)]


def regional_records(tasks: Tasks, members: Iterable[str]) -> list[str]:
    """The same of some scans, by their entities."""
    rows = [tasks.scans[key] for key in members]
    return [
        tasks.layout.regions(row.entities) for row in rows if any(region.serves(row) for region in tasks.study.regions)
    ]


def region_inputs(tasks: Tasks, entities: str) -> list[str]:
    """The scan and the images that mark its regions, as far as they are there."""
    row = tasks.scans[entities]
    return [path for name in (row.image, *tasks.region_images(row)) for path in tasks.image(name)]


def region_settings(tasks: Tasks, entities: str) -> Settings:
    """Settings of one scan's regional means."""
    row = tasks.scans[entities]
    names = tasks.region_images(row)
    expected = {name: tasks.expected(name) for name in (row.image, *names) if tasks.image(name)}
    places = [region.place(row) for region in tasks.study.regions if region.serves(row)]
    return {
        "after": tasks.layout.harmonised_image(row),
        "code": tasks.code("measure_regions.py"),
        # What the demonstration is yet to make has no identity.
        "expected": json.dumps({name: sha256 for name, sha256 in expected.items() if sha256}, sort_keys=True),
        "identities": json.dumps([tasks.identity(name) for name in (row.image, *names)]),
        "image": row.image,
        "places": json.dumps(places, sort_keys=True),
    }


def compared_images(tasks: Tasks, plan_file: str) -> list[str]:
    """Images of the phantoms that are compared between sites, with their references."""
    found: dict[str, None] = {}
    for period in tasks.plan(plan_file)["periods"]:
        if is_proved(period):
            found |= dict.fromkeys(tasks.proving_images(period["setup"], period["phantom_session"], plan_file))
    return list(found)


def site_effect_settings(tasks: Tasks, plan_file: str) -> Settings:
    """Settings of the comparison between sites: phantoms with their kernels, regions, true activities."""
    plan = tasks.plan(plan_file)
    phantoms: dict[str, Any] = {}
    for period in plan["periods"]:
        if is_proved(period):
            name = f"{period['setup']}.{period['phantom_session']}"
            labels = {label: tasks.resolution_settings(label) for label in proving_phantoms(period)}
            phantoms[name] = [tasks.study.by_setup[period["setup"]].site, period["kernel"], labels]
    return {
        "code": tasks.code("measure_site_effect.py"),
        "phantoms": json.dumps(phantoms, sort_keys=True),
        "regions": _digest(_regions(tasks, plan_file)),
        "scale": json.dumps(_scale(tasks), sort_keys=True),
        "target": json.dumps([plan["target"]["in_plane_mm"], plan["target"]["axial_mm"]]),
    }


def _regions(tasks: Tasks, plan_file: str) -> list[Any]:
    rows = [row.model_dump(mode="json") for row in tasks.study.regions]
    scans = [[row.entities, tasks.study.by_setup[row.setup].site] for row in regional_scans(tasks, plan_file)]
    return [rows, scans]


def _scale(tasks: Tasks) -> dict[str, Any]:
    found = {}
    for row in tasks.study.phantoms:
        told = {name: row.details[name] for name in SCALE_DETAILS if name in row.details}
        if told and row.use == "yes":
            identity = tasks.identity(sidecar_path(Path(row.image)).as_posix())
            found[row.phantom] = [told, row.radionuclide, row.acquired.isoformat(), identity]
    return found


def _digest(value: Any) -> str:
    return hashlib.sha256(json.dumps(value, sort_keys=True).encode()).hexdigest()
