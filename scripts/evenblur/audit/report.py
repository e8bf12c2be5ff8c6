"""The report: one self-contained page, a view of the audit's data (`audit.json`) and of the fits' records."""

from collections import Counter
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

from markupsafe import Markup

from evenblur.audit import model
from evenblur.audit.articles import articles, bounded
from evenblur.audit.charts import chart_svg
from evenblur.audit.costs import noise_svg, recovery_cost
from evenblur.audit.curves import Pair, profile_pairs, shown_profiles, time_pair, transfer_pair
from evenblur.audit.figures import Mark, widths_figure
from evenblur.audit.inputs import AuditInput
from evenblur.audit.pages import environment
from evenblur.audit.queries import request
from evenblur.audit.self_checks import columns_of, explanations_of, recoveries, self_checks
from evenblur.audit.sentences import flattened
from evenblur.audit.site_effect_view import site_effect_view
from evenblur.audit.slices import slice_couple
from evenblur.audit.verdicts import PRECEDENCE
from evenblur.codes import HOLDS, meaning

TEMPLATE = "report.html.j2"

MOST_NAMED = 12
"""How many items a list in the page names before it only counts the rest; the tables name all."""


def render_report(
    record: model.AuditRecord,
    *,
    audit: AuditInput,
    templates: Path,
    pictures: Mapping[str, Mapping[str, Any]] | None = None,
) -> str:
    """The page as HTML text: nothing in it is loaded from elsewhere, and everything from the records is escaped.

    Parameters
    ----------
    record
        The audit's data.
    audit
        The records that it was made from: profiles and pictures of the fits stand only there.
    templates
        Folder with the templates, `style.css` and `tables.js`.
    pictures
        Slices of a few scans before and after smoothing, by entities (see `scan_pictures.py`).
    """
    page = environment(templates).get_template(TEMPLATE)
    return page.render(**report_view(record, audit=audit, pictures=pictures or {}))


def report_view(
    record: model.AuditRecord, *, audit: AuditInput, pictures: Mapping[str, Mapping[str, Any]]
) -> dict[str, Any]:
    """What the template lays out: the audit's data, drawings, and words about them."""
    summary = record.summary
    checks = self_checks(audit)
    return {
        "record": record,
        "good": summary.clean and summary.periods_passing == summary.periods > 0 and not summary.scans_held,
        "tolerance": record.settings["tolerance"],
        "verdict_counts": [
            (word, sum(period.verdict == word for period in record.periods)) for word in reversed(PRECEDENCE)
        ],
        "notable": [period for period in record.periods if period.verdict != "pass" or period.stands_out],
        "most_named": MOST_NAMED,
        "figure": _widths(record),
        "pairs": _pairs(record, audit),
        "cost": _cost(record),
        "noise": _safe(noise_svg(record, name="noise")),
        "articles": bounded(articles(record.periods, audit)),
        "check_columns": columns_of(checks),
        "check_words": explanations_of(checks),
        "loose_checks": _loose(checks, record),
        "recovery": recoveries(audit),
        "effect": site_effect_view(audit),
        "held": held_groups(record.scans),
        "scan_pictures": _scan_pictures(record, pictures),
        "sites": sorted({scan.site for scan in record.scans if scan.site}),
        "own_pages": sorted({str(row["site"]) for row in audit.setups if row.get("site")}),
        "settings": flattened(record.settings),
        "approval": (record.settings.get("target") or {}).get("approval") or {},
    }


def held_groups(scans: Sequence[model.ScanRecord]) -> list[dict[str, Any]]:
    """Held scans by reason, in the order of the list of codes, unknown codes last."""
    found: dict[str, list[model.ScanRecord]] = {}
    for scan in scans:
        for code in scan.reasons:
            found.setdefault(code, []).append(scan)
    order = [code for code in HOLDS if code in found] + sorted(set(found) - set(HOLDS))
    return [
        {
            "code": code,
            "meaning": meaning(code),
            "mend": HOLDS[code].mend if code in HOLDS else "look into it",
            "ask": request(code),
            "who": HOLDS[code].who if code in HOLDS else "data manager",
            "scans": found[code],
        }
        for code in order
    ]


def _safe(svg: str | None) -> Markup | None:
    """A drawing of ours as it stands; every text in it is escaped already."""
    return None if svg is None else Markup(svg)


def _widths(record: model.AuditRecord) -> Markup | None:
    if not record.periods:
        return None
    marks: list[list[Mark]] = [[], []]
    for period in record.periods:
        for row, side in zip(marks, period.sides, strict=True):
            row.append(
                Mark(
                    label=period.name,
                    measured_mm=side.measured_mm,
                    measured_half_mm=side.half_interval_mm,
                    target_mm=side.target_mm,
                    achieved_mm=side.achieved_mm,
                    achieved_half_mm=side.resulting_half_interval_mm,
                    declared=side.source == "declared",
                )
            )
    told = "; ".join(f"{period.name} {period.verdict}" for period in record.periods)
    return _safe(
        widths_figure(
            marks[0],
            marks[1],
            name="widths",
            title="Measured, target and achieved widths of every period",
            text=f"One row a period, one panel a direction. The numbers stand in the table of periods. {told}.",
        )
    )


def _pairs(record: model.AuditRecord, audit: AuditInput) -> dict[str, list[dict[str, Any]]]:
    shown = shown_profiles(record, audit)
    groups: dict[str, Sequence[Pair | None]] = {
        "profiles": profile_pairs(shown),
        "transfer": [transfer_pair(shown, record)],
        "time": [time_pair(record)],
    }
    return {
        name: [_drawn(pair, f"{name}{number}") for number, pair in enumerate(pairs, start=1) if pair is not None]
        for name, pairs in groups.items()
    }


def _drawn(pair: Pair, name: str) -> dict[str, Any]:
    return {
        "heading": pair.heading,
        "message": pair.message,
        "svgs": [_safe(chart_svg(chart, name=f"{name}-{number}")) for number, chart in enumerate(pair.charts, start=1)],
    }


def _cost(record: model.AuditRecord) -> dict[str, Any] | None:
    cost = recovery_cost(record)
    if cost is None:
        return None
    return {"columns": cost.columns, "rows": cost.rows, **_drawn(cost.pair, "recovery")}


def _loose(checks: Sequence[Any], record: model.AuditRecord) -> list[Any]:
    """Checks of phantoms that stand behind no period: they show in no article."""
    known = {label for period in record.periods for label in period.phantoms}
    return [check for check in checks if check.phantom not in known]


def _scan_pictures(record: model.AuditRecord, pictures: Mapping[str, Mapping[str, Any]]) -> list[dict[str, Any]]:
    """By site, the pictures of its scans; only of scans that are accepted now."""
    shown: dict[str, list[Any]] = {}
    for scan in record.scans:
        entry = pictures.get(scan.entities)
        if entry and scan.status == "accepted":
            shown.setdefault(scan.site, []).append(
                slice_couple(entry, title=scan.entities, subtitle=f"{scan.setup} · {scan.phantom_session}")
            )
    accepted = Counter(scan.site for scan in record.scans if scan.status == "accepted")
    return [{"site": site, "couples": couples, "of": accepted[site]} for site, couples in shown.items()]
