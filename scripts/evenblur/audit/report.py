"""The report: one self-contained page, a view of the records and of the audit's tables.

Data first: `report_data` gathers plain values and finished sentences, the template only lays them out.
"""

import math
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import jinja2
from markupsafe import Markup
from scipy.special import stdtrit

from evenblur.audit.figures import Mark, widths_figure
from evenblur.audit.inputs import AuditInput, Row, faults, scan_entities, stray_files
from evenblur.audit.panels import Panel, profile_panel
from evenblur.audit.periods import DIRECTIONS, Period, periods_of, version_of
from evenblur.audit.queries import WORDS, excluded, queries_rows, verdict_sentence
from evenblur.audit.self_checks import (
    columns_of,
    explanations_of,
    recoveries,
    self_checks,
    shown_difference,
    shown_error,
)
from evenblur.audit.site_effect_view import site_effect_view
from evenblur.audit.slices import Triple, slice_triple
from evenblur.audit.tables import number, scans_rows
from evenblur.audit.verdicts import PRECEDENCE
from evenblur.codes import HOLDS, meaning

TEMPLATE = "report.html.j2"

SYMBOLS = {"pass": "✓", "fail": "✕", "unproven": "?", "declared": "◇", "coarser": "▲", "unmeasured": "□"}
"""A sign beside each verdict's word, so that colour never speaks alone."""

MEANINGS = {
    "pass": "measured, smoothed, measured again at the target within the tolerance, and certain enough to say so",
    "fail": "the smoothed phantom misses the target by more than the tolerance",
    "unproven": "the phantom is at the target, but its statistical error is unknown or above half the tolerance",
    "declared": "a width was declared, not measured, so there is nothing to measure again",
    "coarser": "the images are coarser than the target, and smoothing cannot be undone: the scans are held",
    "unmeasured": "a width is known neither from a phantom nor from a declaration: the scans are held",
}
"""What each verdict says, for the page's readers."""

_NORMAL_95 = 1.959964  # 97.5 % point of the normal distribution


def render_report(audit: AuditInput, *, templates: Path) -> str:
    """The page as HTML text: nothing in it is loaded from elsewhere, and everything from the records is escaped.

    Parameters
    ----------
    audit
        The records of a run.
    templates
        Folder with `report.html.j2` and `style.css`.
    """
    environment = jinja2.Environment(
        loader=jinja2.FileSystemLoader(templates),
        autoescape=True,
        undefined=jinja2.StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
        keep_trailing_newline=True,
    )
    environment.filters |= {"mm": shown_mm, "signed": shown_difference, "error": shown_error}
    style = Markup((templates / "style.css").read_text(encoding="utf-8"))
    return environment.get_template(TEMPLATE).render(style=style, **report_data(audit))


def report_data(audit: AuditInput) -> dict[str, Any]:
    """Everything that the page shows, as plain values and sentences."""
    periods, scans = periods_of(audit), scans_rows(audit)
    strays, wrong = stray_files(audit), faults(audit)
    counts = {
        "periods": len(periods),
        "passing": sum(period.verdict == "pass" for period in periods),
        "accepted": sum(scan["status"] == "accepted" for scan in scans),
        "held": sum(scan["status"] == "held" for scan in scans),
    }
    clean = not strays and not wrong
    queries, panels, checks = queries_rows(audit), _panels(audit, periods), self_checks(audit)
    return {
        "title": audit.settings["study"]["title"],
        "demo": bool(audit.settings.get("demo")),
        "modality": str(audit.settings.get("modality", "pet")).upper(),
        "tolerance": audit.settings["tolerance"],
        "target": audit.plan.get("target", {}),
        "target_sentences": target_sentences(audit),
        "verdict": verdict_line(counts, clean=clean),
        "good": clean and counts["passing"] == counts["periods"] > 0 and not counts["held"],
        "counts": counts,
        "clean": clean,
        "strays": strays,
        "faults": wrong,
        "verdict_counts": [(word, sum(p.verdict == word for p in periods)) for word in reversed(PRECEDENCE)],
        "periods": [_period_view(audit, period) for period in periods],
        "symbols": SYMBOLS,
        "meanings": MEANINGS,
        "figure": _widths(audit, periods),
        "checks": checks,
        "check_columns": columns_of(checks),
        "check_words": explanations_of(checks),
        "recovery": recoveries(audit),
        "profiles": _profiles(panels),
        "axes": _axes(panels),
        "slices": _slices(audit),
        "effect": site_effect_view(audit),
        "held": _held(audit),
        "scans": [_scan_view(audit, scan, row) for scan, row in zip(audit.plan.get("scans", []), scans, strict=True)],
        "queries": queries,
        "settings": flattened(audit.settings),
        "approval": (audit.settings.get("target") or {}).get("approval") or {},
        "exclusions": _exclusions(audit),
        "other_kinds": _other_kinds(audit),
        "versions": _versions(audit),
        "methods": _methods(audit),
        "phantoms": _phantom_views(audit),
    }


def shown_mm(value: float | None) -> str:
    """A width for reading, two decimals; a dash where there is none.

    >>> shown_mm(4.0), shown_mm(None)
    ('4.00', '–')
    """
    return "–" if value is None else f"{value:.2f}"


def _plural(count: int, word: str) -> str:
    return f"{count} {word}" if count == 1 else f"{count} {word}s"


def verdict_line(counts: Mapping[str, int], *, clean: bool) -> str:
    """The page's first sentence.

    >>> verdict_line({"periods": 2, "passing": 1, "accepted": 9, "held": 1}, clean=True)
    '1 of 2 periods passes; 9 scans are accepted, 1 is held; the harmonised data set is clean.'
    """
    passing = counts["passing"]
    verb = "passes" if passing == 1 else "pass"
    first = f"{passing} of {_plural(counts['periods'], 'period')} {verb}"
    accepted = f"{_plural(counts['accepted'], 'scan')} {'is' if counts['accepted'] == 1 else 'are'} accepted"
    held = f"{counts['held']} {'is' if counts['held'] == 1 else 'are'} held"
    return f"{first}; {accepted}, {held}; the harmonised data set is {'clean' if clean else 'not clean'}."


def target_sentences(audit: AuditInput) -> list[str]:
    """How the target was decided, in sentences."""
    target, rule = audit.plan.get("target", {}), audit.settings.get("target") or {}
    widths = [f"{WORDS[name]} {number(target.get(f'{name}_mm'))} mm" for name in DIRECTIONS if target.get(f"{name}_mm")]
    if not widths:
        return ["No target could be decided: no period in use has a width that may set it."]
    both = target.get("in_plane_mm") == target.get("axial_mm")
    shown = f"{number(target.get('axial_mm'))} mm in both directions" if both else " and ".join(widths)
    sentences = [f"The common width (FWHM) is {shown}."]
    decided, on, reason = (_words(target.get(key)) for key in ("decided_by", "on", "reason"))
    if target.get("choose") == "fixed":
        day = f" on {on}" if on else ""
        sentences.append(
            f"It was fixed by {decided or 'the study'}{day}{': ' + reason if reason else ''}".rstrip(".") + "."
        )
        return sentences
    same = "; the larger of both directions counts for both" if rule.get("isotropic") else ", each direction by itself"
    counts = "may" if rule.get("declared_counts") else "may not"
    sentences.append(
        f"It is set by the coarsest period in use: the largest measured width plus {number(rule.get('allowance_se'))} "
        f"standard errors{same}, rounded up to a multiple of {number(rule.get('round_up_to_mm'))} mm. "
        f"A declared width {counts} set it."
    )
    if decided:
        sentences.append(f"Set by {decided}.")
    if reason:
        sentences.append(reason if reason.endswith(".") else f"{reason}.")
    sentences.append(
        "Taking a maximum is a stated bias: the true result of the coarsest site is a little finer than the target."
    )
    return sentences


def _words(value: Any) -> str:
    if value is None:
        return ""
    if isinstance(value, Mapping):
        return "; ".join(f"{WORDS.get(str(key), str(key))}: {_words(part)}" for key, part in value.items())
    if isinstance(value, Sequence) and not isinstance(value, str):
        return ", ".join(_words(part) for part in value)
    return number(value) if isinstance(value, float) else str(value)


def flattened(settings: Mapping[str, Any], *, prefix: str = "") -> list[tuple[str, str]]:
    """Nested settings as (dotted key, text) pairs, in their order.

    >>> flattened({"target": {"choose": "fixed", "axial_mm": None}, "demo": True})
    [('target.choose', 'fixed'), ('target.axial_mm', 'not set'), ('demo', 'yes')]
    """
    pairs: list[tuple[str, str]] = []
    for key, value in settings.items():
        if isinstance(value, Mapping):
            pairs += flattened(value, prefix=f"{prefix}{key}.")
        elif isinstance(value, bool):
            pairs.append((f"{prefix}{key}", "yes" if value else "no"))
        else:
            pairs.append((f"{prefix}{key}", "not set" if value is None else _words(value)))
    return pairs


def half_interval(
    statistical_se_mm: float | None, *, total_se_mm: float | None, degrees: float | None, repeatability_mm: float
) -> float | None:
    """Half a 95 % interval (mm): Student t for the measurement's own error, the normal law for the rest of the error.

    The rest is the repeatability of phantom sessions, or a declared width's error. None without a total error.

    >>> round(half_interval(None, total_se_mm=0.2, degrees=None, repeatability_mm=0.2), 3)
    0.392
    """
    if total_se_mm is None:
        return None
    if statistical_se_mm is None:
        return _NORMAL_95 * total_se_mm
    factor = float(stdtrit(degrees, 0.975)) if degrees and degrees > 0 else _NORMAL_95
    return math.hypot(factor * statistical_se_mm, _NORMAL_95 * repeatability_mm)


def _half(audit: AuditInput, period: Period, name: str) -> float | None:
    side = period.in_plane if name == "in_plane" else period.axial
    records = [audit.resolution.get(label, {}) for label in period.phantoms]
    widths = [record.get(name) or {} for record in records if record.get("kind") == side.facts.source]
    degrees = min((width["df"] for width in widths if width.get("df")), default=None)
    return half_interval(
        side.facts.statistical_se_mm,
        total_se_mm=side.se_mm,
        degrees=degrees,
        repeatability_mm=audit.settings["phantoms"]["repeatability_mm"],
    )


def _widths(audit: AuditInput, periods: Sequence[Period]) -> Markup | None:
    if not periods:
        return None
    marks = {}
    for name in DIRECTIONS:
        marks[name] = [_mark(audit, period, name) for period in periods]
    told = "; ".join(f"{p.name} {p.verdict}" for p in periods)
    return Markup(  # drawn by us; every text in it is escaped
        widths_figure(
            marks["in_plane"],
            marks["axial"],
            name="widths",
            title="Measured, target and achieved widths of every period",
            text=f"One row a period, one panel a direction. The numbers stand in the table of periods. {told}.",
        )
    )


def _mark(audit: AuditInput, period: Period, name: str) -> Mark:
    side = period.in_plane if name == "in_plane" else period.axial
    facts, half = side.facts, _half(audit, period, name)
    shrunk = (
        None
        if half is None or not facts.target_mm or facts.measured_mm is None
        else facts.measured_mm / facts.target_mm
    )
    return Mark(
        label=f"{period.setup} · {period.phantom_session}",
        measured_mm=facts.measured_mm,
        measured_half_mm=half,
        target_mm=facts.target_mm,
        achieved_mm=facts.achieved_mm,
        achieved_half_mm=None if shrunk is None or half is None else half * shrunk,
        declared=facts.source == "declared",
    )


def _panels(audit: AuditInput, periods: Sequence[Period]) -> list[Panel]:
    panels = []
    for period in periods:
        shown = (audit.achieved.get((period.setup, period.phantom_session)) or {}).get("profiles") or {}
        for label, pair in shown.items():
            if pair and (pair.get("before") or pair.get("after")):
                kind = str(audit.resolution.get(label, {}).get("kind") or "").replace("_", " ")
                name = f"{period.setup} · {period.phantom_session}"
                panels.append(Panel(name, kind or label, pair.get("before"), pair.get("after")))
    return panels


def _axes(panels: Sequence[Panel]) -> list[tuple[str, str]]:
    """What the panels' axes show, once for each kind of phantom: its name, then the words of its profile."""
    found: dict[tuple[str, str], None] = {}
    for panel in panels:
        shown = panel.before or panel.after or {}
        label, unit = (str(shown.get(key) or "") for key in ("label", "unit"))
        found[panel.subtitle, f"{label} ({unit})" if unit else label] = None
    return sorted(found)


def _profiles(panels: Sequence[Panel]) -> list[dict[str, Any]]:
    return [  # drawn by us; every text in the drawing is escaped
        {
            "title": panel.title,
            "subtitle": panel.subtitle,
            "svg": Markup(profile_panel(panel, name=f"profile{number}")),
        }
        for number, panel in enumerate(panels, start=1)
    ]


def _slices(audit: AuditInput) -> list[Triple]:
    """Pictures of the fits, in the order of the table of phantoms."""
    triples = []
    for row in audit.phantoms:
        record = audit.resolution.get(str(row["phantom"])) or {}
        title = f"{record.get('setup')} · {record.get('phantom_session')}"
        subtitle = str(record.get("kind") or "").replace("_", " ")
        for entry in (record.get("fit") or {}).get("slices") or ():
            triples.append(slice_triple(entry, title=title, subtitle=subtitle))
    return triples


def _period_view(audit: AuditInput, period: Period) -> dict[str, Any]:
    tolerance_mm = audit.settings["tolerance"]["achieved_mm"]
    rows = []
    for name, side in (("in_plane", period.in_plane), ("axial", period.axial)):
        rows.append({"word": WORDS[name], "side": side, "source": (side.facts.source or "none").replace("_", " ")})
    return {
        "period": period,
        "rows": rows,
        "why": "" if period.verdict == "pass" else verdict_sentence(period, tolerance_mm=tolerance_mm)[0],
        "flags": [(code, text or meaning(code)) for code, text in period.flags.items()],
    }


def _held(audit: AuditInput) -> list[dict[str, Any]]:
    """Held scans by reason, in the order of the list of codes, unknown codes last."""
    found: dict[str, list[Row]] = {}
    for scan in audit.plan.get("scans", []):
        for code in scan.get("reasons") or ():
            found.setdefault(code, []).append(scan)
    order = [code for code in HOLDS if code in found] + sorted(set(found) - set(HOLDS))
    return [
        {
            "code": code,
            "meaning": meaning(code),
            "mend": HOLDS[code].mend.replace("`", "") if code in HOLDS else "look into it",
            "who": HOLDS[code].who if code in HOLDS else "data manager",
            "scans": [
                (scan["entities"], scan["setup"], (scan.get("notes") or {}).get(code) or "") for scan in found[code]
            ],
        }
        for code in order
    ]


def _scan_view(audit: AuditInput, scan: Row, row: dict[str, str]) -> dict[str, Any]:
    made = audit.scan_records.get(scan["entities"], {}).get("Evenblur") or {}
    before, after = made.get("total_before_ml"), made.get("total_after_ml")
    change = "" if before in (None, 0) or after is None else f"{(after - before) / abs(before):+.1e}"
    voxel = " × ".join(row["voxel_mm"].split(";")) if row["voxel_mm"] else ""
    return {"entities": scan["entities"], "row": row, "change": change, "voxel": voxel, "kernel": made.get("kernel")}


def _exclusions(audit: AuditInput) -> list[dict[str, str]]:
    found = []
    for what, rows in (("phantom", audit.phantoms), ("scan", audit.scans)):
        for row in rows:
            if excluded(row):
                item = str(row["phantom"]) if what == "phantom" else scan_entities(row)
                reason, by = (str(row.get(key) or "not stated") for key in ("use_reason", "decided_by"))
                found.append({"what": what, "item": item, "setup": str(row["setup"]), "reason": reason, "by": by})
    return found


def _other_kinds(audit: AuditInput) -> list[dict[str, Any]]:
    return [
        {"period": f"{entry['setup']}.{entry['phantom_session']}", **other}
        for entry in audit.plan.get("periods", [])
        for other in entry.get("other_kinds") or ()
    ]


def _versions(audit: AuditInput) -> list[tuple[str, int]]:
    counts: dict[str, int] = {}
    for record in audit.scan_records.values():
        counts[version_of(record)] = counts.get(version_of(record), 0) + 1
    return sorted(counts.items())


def _methods(audit: AuditInput) -> list[tuple[str, str]]:
    found = [record.get("method") or {} for record in [*audit.resolution.values(), *audit.achieved.values()]]
    return sorted({(str(method.get("name") or "unknown"), str(method.get("version") or "")) for method in found})


def _phantom_views(audit: AuditInput) -> list[dict[str, str]]:
    views = []
    for row in audit.phantoms:
        label = str(row["phantom"])
        used = (audit.resolution.get(label, {}).get("input") or {}).get("sha256")
        views.append(
            {
                "phantom": label,
                "setup": str(row["setup"]),
                "session": str(row["phantom_session"]),
                "kind": str(row["kind"]).replace("_", " "),
                "acquired": str(row.get("acquired") or ""),
                "sha256": str(used or audit.intake_phantoms.get(label, {}).get("sha256") or ""),
            }
        )
    return views
