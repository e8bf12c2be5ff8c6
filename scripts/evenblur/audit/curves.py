"""The report's figures about all periods at once: profiles, transfer of detail, widths over time."""

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from datetime import date
from itertools import pairwise
from typing import Any

import numpy as np

from evenblur.audit import expected, model
from evenblur.audit.charts import Chart, Series
from evenblur.audit.inputs import AuditInput

_FREQUENCIES = np.linspace(0.0, 0.14, 57)
_RADIAL_KINDS = ("point_source", "line_source")
_EDGE_KINDS = ("uniform_cylinder",)


@dataclass(frozen=True)
class Shown:
    """A phantom's profile before and after smoothing, with its period's verdict."""

    name: str
    kind: str
    verdict: str
    before: Mapping[str, Any] | None
    after: Mapping[str, Any] | None


@dataclass(frozen=True)
class Pair:
    """Two charts side by side, with a heading and what they say."""

    heading: str
    message: str
    charts: tuple[Chart, ...]


def shown_profiles(record: model.AuditRecord, audit: AuditInput) -> list[Shown]:
    """The profiles of every period that has any, in the order of the periods."""
    found = []
    for period in record.periods:
        achieved = audit.achieved.get((period.setup, period.phantom_session)) or {}
        profiles = achieved.get("profiles") or dict.fromkeys(period.phantoms)
        for label, pair in profiles.items():
            measured = audit.resolution.get(label, {})
            before = (pair or {}).get("before") or (measured.get("fit") or {}).get("profile")
            after = (pair or {}).get("after")
            if before or after:
                found.append(Shown(period.name, str(measured.get("kind") or ""), period.verdict, before, after))
    return found


def profile_pairs(shown: Sequence[Shown]) -> list[Pair]:
    """For each kind of phantom: the profiles of all periods before smoothing, and after it."""
    pairs = []
    for kind in dict.fromkeys(one.kind for one in shown):
        members = [one for one in shown if one.kind == kind]
        sides = {
            "before": [(one, _shares(one.before)) for one in members if one.before],
            "after": [(one, _shares(one.after)) for one in members if one.after],
        }
        points = [point for side in sides.values() for _, series in side for point in series]
        if not points:
            continue
        xs, ys = [x for x, _ in points], [y for _, y in points]
        words = (members[0].before or members[0].after or {}).get("label") or "distance"
        charts = tuple(
            Chart(
                title=f"Profiles of {len(side)} phantom scans ({kind.replace('_', ' ')}), {when} smoothing",
                told=f"{words}, in mm, against the share of the largest fitted value.",
                x_label=f"{words}, mm",
                y_label=f"share, {when} smoothing",
                series=[Series(one.name, series, f"{when} {_doubt(one.verdict)}") for one, series in side],
                x_range=(min(xs), max(xs)),
                y_range=(min(0.0, *ys), max(1.0, *ys)),
            )
            for when, side in sides.items()
        )
        text = f"{kind.replace('_', ' ').capitalize()}: {len(members)} phantom {_scans(len(members))}."
        pairs.append(Pair("Profiles of all periods", text, charts))
    return pairs


def _scans(count: int) -> str:
    return "scan" if count == 1 else "scans"


def _doubt(verdict: str) -> str:
    return "" if verdict == "pass" else "doubt"


def _shares(profile: Mapping[str, Any] | None) -> list[tuple[float, float]]:
    shown = profile or {}
    measured, fitted = shown.get("measured") or [], shown.get("fitted") or []
    largest = max((abs(value) for value in fitted or measured if value is not None), default=0.0) or 1.0
    values = zip(shown.get("position_mm") or [], measured, strict=False)
    return [(float(x), value / largest) for x, value in values if value is not None]


def transfer_pair(shown: Sequence[Shown], record: model.AuditRecord) -> Pair | None:
    """Modulation transfer in-plane of every period, before and after, with the target's own; None without profiles."""
    target = record.target.in_plane_mm
    sides: dict[str, list[tuple[Shown, list[float]]]] = {"before": [], "after": []}
    for one in shown:
        for when, profile in (("before", one.before), ("after", one.after)):
            values = transfer_of(profile, kind=one.kind)
            if values is not None:
                sides[when].append((one, values))
    if not sides["before"]:
        return None
    wanted = expected.gaussian_transfer(_FREQUENCIES, fwhm_mm=target).tolist() if target else None
    told = {when: _half_words([values for _, values in side]) for when, side in sides.items()}
    charts = []
    for when, side in sides.items():
        series = [Series(one.name, _against(values), f"{when} {_doubt(one.verdict)}") for one, values in side]
        if wanted is not None:
            series.append(Series(f"Gaussian of {target:g} mm, the target", _against(wanted), "aim"))
        charts.append(
            Chart(
                title=f"In-plane modulation transfer of {len(side)} phantom scans {when} smoothing",
                told=f"Against the spatial frequency. {told[when]}",
                x_label="spatial frequency, 1/mm",
                y_label=f"transfer, {when} smoothing",
                series=series,
                x_range=(0.0, float(_FREQUENCIES[-1])),
                y_range=(0.0, 1.05),
            )
        )
    message = f"Before smoothing: {told['before']} After it: {told['after']}"
    return Pair("Modulation transfer, in-plane", message, tuple(charts))


def transfer_of(profile: Mapping[str, Any] | None, *, kind: str) -> list[float] | None:
    """Modulation transfer that a profile shows at the figure's frequencies; None where its kind tells none."""
    points = _shares(profile)
    if len(points) < 3 or kind not in (*_RADIAL_KINDS, *_EDGE_KINDS):
        return None
    reading = expected.radial_transfer if kind in _RADIAL_KINDS else expected.edge_transfer
    x, y = zip(*points, strict=True)
    try:
        values = reading(x, y, frequency_per_mm=_FREQUENCIES)
    except ValueError:
        return None
    return [float(value) for value in values]


def _against(values: Iterable[float]) -> list[tuple[float, float]]:
    return [(float(f), value) for f, value in zip(_FREQUENCIES, values, strict=True)]


def half_transfer(values: Sequence[float]) -> float | None:
    """The lowest frequency (1/mm) at which a transfer falls to a half, between its points by a straight line.

    >>> half_transfer([1.0, 0.6, 0.4] + [0.0] * 54)
    0.00375
    """
    for index, (first, second) in enumerate(pairwise(values)):
        if first >= 0.5 > second:
            low, high = float(_FREQUENCIES[index]), float(_FREQUENCIES[index + 1])
            return round(low + (first - 0.5) / (first - second) * (high - low), 6)
    return None


def _half_words(curves: Iterable[Sequence[float]]) -> str:
    found = [value for value in map(half_transfer, curves) if value is not None]
    if not found:
        return "no transfer falls to a half."
    return f"half is passed on at {min(found):.4f} to {max(found):.4f} per mm."


def time_pair(record: model.AuditRecord) -> Pair | None:
    """Measured widths of each setup against the day of its phantom session; None where nothing was measured."""
    charts = []
    setups: dict[str, list[model.PeriodRecord]] = {}
    for period in record.periods:
        if period.acquired:
            setups.setdefault(period.setup, []).append(period)
    days = [_day(period.acquired) for periods in setups.values() for period in periods]
    if not days:
        return None
    first, last = min(days), max(days)
    margin = max(20.0, 0.05 * (last - first))
    for name, word in (("in_plane", "in-plane"), ("axial", "axial")):
        series, ends = [], []
        for setup, periods in setups.items():
            ordered = sorted(periods, key=lambda period: period.acquired)
            points, bars = [], []
            for period in ordered:
                side = next(one for one in period.sides if one.name == name)
                if side.measured_mm is None or side.source == "declared":
                    continue
                at, half = _day(period.acquired), side.half_interval_mm or 0.0
                points.append((at, side.measured_mm))
                bars.append((at, side.measured_mm - half, side.measured_mm + half))
            ends += [end for _, low, high in bars for end in (low, high)]
            few = len(setups) <= 12 or len(points) > 1
            series.append(Series(setup, points, "before", marks="dot", bars=bars, tag=setup if few else ""))
        if not ends:
            continue
        target = getattr(record.target, f"{name}_mm")
        low, high = min([*ends, *([target] if target else [])]), max([*ends, *([target] if target else [])])
        charts.append(
            Chart(
                title=f"Measured {word} widths over time",
                told="One point a phantom session, with its 95 % interval; the numbers stand in the table of periods.",
                x_label="day of the phantom session",
                y_label=f"{word} width (FWHM), mm",
                series=series,
                x_range=(first - margin, last + margin),
                y_range=(low - 0.3, high + 0.3),
                x_ticks=_date_ticks(first - margin, last + margin),
                levels=[(target, "target")] if target else [],
            )
        )
    text = "Sessions of one setup are joined: a step is a change of the scanner, or scatter between sessions."
    return Pair("Widths of each setup over time", text, tuple(charts))


def _day(text: str) -> float:
    return float(date.fromisoformat(text[:10]).toordinal())


def _date_ticks(low: float, high: float) -> list[tuple[float, str]]:
    """First days of months, of every so many that at most six are named."""
    first, last = date.fromordinal(int(low)), date.fromordinal(int(high))
    months = [(year, month) for year in range(first.year, last.year + 1) for month in range(1, 13)]
    days = [(float(date(year, month, 1).toordinal()), f"{year}-{month:02d}") for year, month in months]
    inside = [(day, words) for day, words in days if low <= day <= high]
    step = next((step for step in (1, 2, 3, 6, 12) if len(inside) <= 6 * step), max(12, len(inside) // 6))
    aligned = [(day, words) for day, words in inside if (int(words[5:]) - 1) % min(step, 12) == 0]
    return aligned[:: max(1, step // 12)] if aligned else inside[:1]
