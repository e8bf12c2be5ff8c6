"""A site's own record as a page that prints on a sheet or two."""

from collections.abc import Mapping
from dataclasses import replace
from pathlib import Path
from typing import Any

from evenblur.audit import model
from evenblur.audit.articles import articles
from evenblur.audit.inputs import AuditInput
from evenblur.audit.own_words import OwnWords, words_by_site
from evenblur.audit.pages import environment
from evenblur.audit.report import held_groups
from evenblur.audit.self_checks import columns_of
from evenblur.audit.slices import slice_couple

TEMPLATE = "site.html.j2"


def render_sites(
    records: Mapping[str, model.SiteRecord],
    *,
    audit: AuditInput,
    templates: Path,
    pictures: Mapping[str, Mapping[str, Any]] | None = None,
) -> dict[str, str]:
    """Every site's own page as HTML text, by site.

    Parameters
    ----------
    records
        The sites' own records.
    audit
        The records that they were made from: profiles and pictures of the fits stand only there.
    templates
        Folder with the templates, `style.css` and `tables.js`.
    pictures
        Slices of a few scans before and after smoothing, by entities.
    """
    page, own = environment(templates).get_template(TEMPLATE), OwnWords.of_all(words_by_site(audit))
    return {site: page.render(**_view(record, audit, pictures or {}, own[site])) for site, record in records.items()}


def _view(
    record: model.SiteRecord, audit: AuditInput, pictures: Mapping[str, Mapping[str, Any]], own: OwnWords
) -> dict[str, Any]:
    shown = articles(record.periods, audit)
    checks = [
        replace(check, flags=tuple((code, own.text(text), mend, who) for code, text, mend, who in check.flags))
        for article in shown
        for check in article.checks
    ]
    couples = [
        slice_couple(pictures[scan.entities], title=scan.entities, subtitle=scan.setup)
        for scan in record.scans
        if scan.status == "accepted" and scan.entities in pictures
    ]
    return {
        "record": record,
        "tolerance": {"achieved_mm": record.tolerance_mm},
        "articles": shown,
        "checks": checks,
        "check_columns": columns_of(checks),
        "scan_couples": couples,
        "held": held_groups(record.scans),
        "accepted": sum(scan.status == "accepted" for scan in record.scans),
    }
