"""What differs between sites, as the report's section shows it: finished words and figures."""

from collections.abc import Mapping
from typing import Any

from evenblur.audit.inputs import AuditInput

Row = Mapping[str, Any]


def site_effect_view(audit: AuditInput) -> dict[str, Any] | None:
    """The section's data, or None where the run has no record of the site effect."""
    record = audit.site_effect
    if not record:
        return None
    regions = [_region(row) for row in record["regions"]]
    left_out = len(record["regions_left_out"])
    return {
        "phantoms": [_group(group) for group in _compared_first(record["phantoms"])],
        "regions": regions,
        "regions_caption": _caption(record["regions"]),
        "regions_left_out": _left_out(left_out),
        "scale": [_scale(row) for row in record["scale"]],
        "drift": _drift(audit),
    }


def percent(share: float | None, *, decimals: int = 1) -> str:
    """A share in per cent, for reading.

    >>> percent(0.05567), percent(None)
    ('5.6 %', '–')
    """
    return "–" if share is None else f"{100 * share:.{decimals}f} %"


def _left_out(count: int) -> str:
    if count == 0:
        return ""
    return f"{count} region{' of a scan' if count == 1 else 's of single scans'} gave no mean."


def _compared_first(groups: list[Row]) -> list[Row]:
    return sorted(groups, key=lambda group: group["why"] is not None)


def _group(group: Row) -> dict[str, Any]:
    title = str(group["kind"]).replace("_", " ")
    title = title[0].upper() + title[1:]
    view = {"title": title, "why": group["why"], "left_out": group["left_out"]}
    if group["why"]:
        return view
    names = (
        ("between_sites", "Point by point, between sites"),
        ("between_periods", "Point by point, between periods"),
        ("profile", "By depth, between sites"),
    )
    rows = [
        {
            "words": words,
            "before": percent(group[name]["before"], decimals=2),
            "after": percent(group[name]["after"], decimals=2),
            "change": _signed(group[name]["change"]),
        }
        for name, words in names
        if group[name]
    ]
    change = group["between_sites"]["change"]
    words = "falls" if change < 0 else "rises"
    sentence = (
        f"The {group['object']}: the coefficient of variation between sites {words} by "
        f"{percent(abs(change), decimals=0)}, from {percent(group['between_sites']['before'])} to "
        f"{percent(group['between_sites']['after'])}."
    )
    counts = {name: group[name] for name in ("points", "periods", "sites")}
    return {**view, **counts, "rows": rows, "sentence": sentence}


def _signed(share: float) -> str:
    return f"{100 * share:+.0f} %".replace("-", "−")


def _caption(rows: list[Row]) -> str:
    words = "Regional means of the accepted scans, sites as groups"
    if any(row["divided"] for row in rows):
        return f"{words}; each is divided by its scan's reference region."
    return f"{words}, in the images' own units: doses and scales of the sites are in them."


def _region(row: Row) -> dict[str, Any]:
    if row["why"]:
        return {"region": row["region"], "why": row["why"]}
    sides = [{"when": when, **_side(row[when])} for when in ("before", "after")]
    counts = f"{row['before']['sites']}, {row['before']['scans']}"
    return {"region": row["region"], "why": None, "counts": counts, "sides": sides}


def _side(side: Row) -> dict[str, str]:
    return {
        "variation": percent(side["variation"]),
        "share": _with_interval(side["share"], side["share_interval"]),
        "eta": _with_interval(side["eta_squared"], side["eta_interval"]),
    }


def _with_interval(value: float | None, interval: Any) -> str:
    if value is None or interval is None:
        return "–"
    return f"{value:.2f} ({interval[0]:.2f} to {interval[1]:.2f})"


def _scale(row: Row) -> dict[str, Any]:
    shown = {"period": row["period"], "phantom": row["phantom"], "why": row["why"]}
    if row["why"]:
        return shown
    return {
        **shown,
        "measured": f"{row['measured_kbq_ml']:.2f}",
        "true": f"{row['true_kbq_ml']:.2f}",
        "ratio": f"{row['ratio']:.3f}",
    }


def _drift(audit: AuditInput) -> list[str]:
    """One sentence a chart: whether each session lies within its limits."""
    sentences = []
    for chart in audit.plan.get("drift") or []:
        points = chart["points"]
        judged = [point for point in points if point["low_mm"] is not None]
        beyond = [point["phantom_session"] for point in judged if point["beyond"]]
        widths = ", ".join(f"{point['fwhm_mm']:.2f}" for point in points)
        told = f"beyond the control limits: {', '.join(beyond)}" if beyond else "none beyond its control limits"
        if not judged:
            told = f"not judged ({points[-1]['why']})"
        direction = str(chart["direction"]).replace("_", "-")
        sentences.append(f"{chart['setup']}, {direction}: {widths} mm; {told}.")
    return sentences
