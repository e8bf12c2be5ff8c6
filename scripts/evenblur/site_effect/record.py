"""The record of the site effect, from the records and images of a run."""

import json
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import evenblur
from evenblur.achieving import ProvingPhantom
from evenblur.command import read_record
from evenblur.images.sidecars import sidecar_path
from evenblur.measuring import plain
from evenblur.site_effect.between_sites import SitePhantom, compare_phantoms
from evenblur.site_effect.scale import scale_entry
from evenblur.site_effect.variance import SiteVariance, site_variance
from evenblur.study.periods import is_proved, proving_phantoms
from evenblur.study.reading import Study
from evenblur.study.records import Layout

SCALE_FIELDS = ("TimeZero", "ImageDecayCorrected", "ImageDecayCorrectionTime")
"""What is read from a phantom's sidecar to compare its scale; none of it is written anywhere."""


def site_effect_record(study_dir: Path, study: Study) -> dict[str, Any]:
    """What differs between sites before and after: `phantoms`, `regions`, `scale`.

    Raises
    ------
    InputError
        If a record or an image is missing, damaged, or changed since the run planned with it.
    """
    layout = Layout(study)
    plan = read_record(study_dir / layout.plan)
    target = max((plan["target"][f"{d}_mm"] or 0.0 for d in ("in_plane", "axial")), default=0.0)
    phantoms = _site_phantoms(study_dir, study, plan)
    return {
        "phantoms": compare_phantoms(phantoms, target_mm=target, study_dir=study_dir),
        "regions": compare_regions(_regional_values(study_dir, study, plan), _references(study)),
        "regions_left_out": _regions_left_out(study_dir, study, plan),
        "scale": _scale(study_dir, study, plan),
        "method": {"name": "site effect", "version": evenblur.__version__},
    }


def _site_phantoms(study_dir: Path, study: Study, plan: Mapping[str, Any]) -> list[SitePhantom]:
    layout = Layout(study)
    found = []
    for period in plan["periods"]:
        if not is_proved(period):
            continue
        kinds: set[str] = set()
        for label, directions in proving_phantoms(period).items():
            row = study.by_phantom[label]
            if row.kind in kinds:
                continue
            kinds.add(row.kind)
            record = read_record(study_dir / layout.resolution(label))
            seen = record["input"]
            identities = (seen["sha256"], seen.get("reference_sha256"))
            found.append(
                SitePhantom(
                    phantom=ProvingPhantom(label, row.image, row.kind, row.details, directions, *identities),
                    site=study.by_setup[row.setup].site,
                    period=f"{period['setup']}.{period['phantom_session']}",
                    kernel=(period["kernel"]["in_plane_mm"], period["kernel"]["axial_mm"]),
                    fit=record["fit"],
                )
            )
    return found


Values = dict[str, list[tuple[str, str, float, float]]]
"""By region: entities, site, mean before and after of every scan."""


def _accepted_records(study_dir: Path, study: Study, plan: Mapping[str, Any]) -> list[tuple[str, str, dict[str, Any]]]:
    layout = Layout(study)
    found = []
    for scan in plan["scans"]:
        row = study.by_entities.get(scan["entities"])
        if scan["status"] == "accepted" and row is not None and any(region.serves(row) for region in study.regions):
            record = read_record(study_dir / layout.regions(row.entities))
            found.append((row.entities, study.by_setup[row.setup].site, record["regions"]))
    return found


def _regional_values(study_dir: Path, study: Study, plan: Mapping[str, Any]) -> Values:
    values: Values = {}
    for entities, site, regions in _accepted_records(study_dir, study, plan):
        for region, entry in regions.items():
            if entry["before"] is not None:
                values.setdefault(region, []).append((entities, site, entry["before"], entry["after"]))
    return values


def _regions_left_out(study_dir: Path, study: Study, plan: Mapping[str, Any]) -> list[dict[str, str]]:
    return [
        {"entities": entities, "region": region, "why": entry["why"]}
        for entities, _, regions in _accepted_records(study_dir, study, plan)
        for region, entry in regions.items()
        if entry["before"] is None
    ]


def _references(study: Study) -> set[str]:
    return {row.region for row in study.regions if row.reference == "yes"}


def compare_regions(values: Values, references: set[str]) -> list[dict[str, Any]]:
    """The site effect of every region before and after.

    Parameters
    ----------
    values
        By region: entities, site, mean before and mean after of every scan.
    references
        Regions that the others of a scan are divided by (their mean where there are several); none to compare the means
        as they are.

    >>> pair = [("s1", "quay", 1.0, 2.0), ("s2", "mill", 3.0, 2.0)]
    >>> compare_regions({"cortex": pair}, set())[0]["before"]["variation"]
    0.707107
    """
    divisors: dict[str, tuple[list[float], list[float]]] = {}
    for region in sorted(references & set(values)):
        for entities, _, before, after in values[region]:
            found = divisors.setdefault(entities, ([], []))
            found[0].append(before)
            found[1].append(after)
    rows = []
    for region, scans in values.items():
        divided = bool(references) and region not in references
        entry: dict[str, Any] = {"region": region, "divided": divided, "before": None, "after": None, "why": None}
        sides: tuple[dict[str, list[float]], dict[str, list[float]]] = ({}, {})
        for entities, site, *pair in scans:
            own = divisors.get(entities) if divided else ([1.0], [1.0])
            if own is None:
                continue
            for side, value, parts in zip(sides, pair, own, strict=True):
                side.setdefault(site, []).append(value * len(parts) / sum(parts))
        if len(sides[0]) < 2:
            rows.append({**entry, "why": "fewer than two sites have a value of it"})
            continue
        rows.append({**entry, "before": _shown(site_variance(sides[0])), "after": _shown(site_variance(sides[1]))})
    return rows


def _shown(found: SiteVariance) -> dict[str, Any]:
    shown: dict[str, Any] = plain(vars(found))
    return shown


def _scale(study_dir: Path, study: Study, plan: Mapping[str, Any]) -> list[dict[str, Any]]:
    layout = Layout(study)
    entries = []
    for row in study.phantoms:
        record_file = study_dir / layout.resolution(row.phantom)
        if row.use != "yes" or "true_kbq_ml" not in row.details or not record_file.is_file():
            continue
        fit = read_record(record_file)["fit"]
        image = study_dir / row.image
        fields = _sidecar_fields(image)
        entries.append(
            scale_entry(
                phantom=row.phantom,
                period=f"{row.setup}.{row.phantom_session}",
                details=row.details,
                radionuclide=row.radionuclide,
                inside=fit.get("inside"),
                units=row.details.get("image_unit") or read_record(study_dir / layout.intake(row))["units"],
                sidecar=fields,
                acquired=row.acquired,
            )
        )
    return entries


def _sidecar_fields(image: Path) -> dict[str, Any]:
    try:
        given = json.loads(sidecar_path(image).read_text(encoding="utf-8"))
    except (OSError, ValueError, RecursionError):
        return {}
    return {name: given[name] for name in SCALE_FIELDS if name in given} if isinstance(given, dict) else {}
