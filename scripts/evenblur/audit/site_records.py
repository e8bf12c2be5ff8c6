"""Each site's own smoothing record: its part of the audit, complete by itself, silent about other sites."""

from collections.abc import Mapping
from pathlib import Path
from typing import Any

from pydantic import ValidationError

from evenblur.audit import model
from evenblur.audit.inputs import AuditInput
from evenblur.audit.own_words import OwnWords, words_by_site
from evenblur.command import read_record
from evenblur.errors import InputError


def sites_of(audit: AuditInput) -> list[str]:
    """The sites of the table of setups, in its order."""
    return list(dict.fromkeys(str(row["site"]) for row in audit.setups))


def site_records(record: model.AuditRecord, audit: AuditInput) -> dict[str, model.SiteRecord]:
    """Every site's own record, by site.

    Parameters
    ----------
    record
        The whole audit.
    audit
        The records that it was made from.
    """
    own = OwnWords.of_all(words_by_site(audit))
    return {site: site_record(record, audit, site=site, own=own[site]) for site in sites_of(audit)}


def site_record(record: model.AuditRecord, audit: AuditInput, *, site: str, own: OwnWords) -> model.SiteRecord:
    """One site's own record; `own` takes other sites' words out of it."""

    def mine(name: str) -> list[dict[str, Any]]:
        parts = getattr(record, name)
        return [own.value(part.model_dump()) for part in parts if part.site == site]

    setups = [_setup(row) for row in audit.setups if str(row["site"]) == site]
    labels = {setup.setup for setup in setups}
    other = [own.value(part.model_dump()) for part in record.other_kinds if part.setup in labels]
    return model.SiteRecord(
        program=record.program,
        study=record.study.model_copy(update={"title": own.text(record.study.title)}),
        site=site,
        target=model.SiteTargetRecord(
            in_plane_mm=record.target.in_plane_mm,
            axial_mm=record.target.axial_mm,
            choose=record.target.choose,
            on=record.target.on,
        ),
        tolerance_mm=record.settings["tolerance"]["achieved_mm"],
        repeatability_mm=record.settings["phantoms"]["repeatability_mm"],
        setups=[model.SetupRecord(**own.value(setup.model_dump())) for setup in setups],
        periods=[model.PeriodRecord(**{**part, "stands_out": []}) for part in mine("periods")],
        other_kinds=[model.OtherKindRecord(**part) for part in other],
        scans=[model.ScanRecord(**part) for part in mine("scans")],
        phantoms=[model.PhantomRecord(**part) for part in mine("phantoms")],
        queries=[model.QueryRecord(**part) for part in mine("queries")],
        exclusions=[model.ExclusionRecord(**part) for part in mine("exclusions")],
    )


def _setup(row: Mapping[str, Any]) -> model.SetupRecord:
    return model.SetupRecord(
        setup=str(row["setup"]),
        scanner=str(row.get("scanner") or ""),
        reconstruction=str(row.get("reconstruction") or ""),
        declared_in_plane_mm=row.get("declared_in_plane_mm"),
        declared_axial_mm=row.get("declared_axial_mm"),
        declared_source=str(row.get("declared_source") or ""),
        changed=[str(day) for day in row.get("changed") or ()],
    )


def read_audit(path: Path) -> model.AuditRecord:
    """Read `audit.json`.

    Raises
    ------
    InputError
        If it is missing or no audit of this program.
    """
    try:
        return model.AuditRecord.model_validate(read_record(path))
    except ValidationError as error:
        first = error.errors()[0]
        where = ".".join(map(str, first["loc"]))
        raise InputError(str(path), f"is no audit ({where}: {first['msg']})", "delete it and run again") from error


def remove_others(folder: Path, sites: set[str]) -> None:
    """Remove records that an earlier run left of sites which the tables no longer name."""
    for path in folder.iterdir():
        if path.suffix in (".html", ".json") and path.stem not in sites:
            path.unlink()
