"""The control charts of the plan: each setup's widths over its phantom sessions, their limits and flags."""

import math
from itertools import pairwise

from evenblur.check.findings import DisagreementError, same_number, same_text
from evenblur.check.handover import DIRECTIONS, Handover, Record
from evenblur.check.periods import Period
from evenblur.check.tables import Periods

CHART_SESSIONS = 10
"""So many sessions that can be compared give limits from their own scatter."""

Limits = tuple[float, float] | None


def check_drift(bag: Handover, periods: Periods) -> int:
    """Compare the plan's charts point by point, and the flag `width_drifts` with what they show."""
    charts = iter(bag.plan["drift"])
    count, beyond = 0, dict.fromkeys(periods, 0)
    for setup in bag.setups:
        sessions = [p for p in periods.values() if p.setup == setup["setup"] and p.phantoms]
        for direction in DIRECTIONS:
            measured = [p for p in sessions if p.source[direction] not in (None, "declared")]
            if len(measured) < 2:
                continue
            where = f"plan.json, drift of {setup['setup']}, {direction}"
            chart: Record = next(charts, {"setup": None, "direction": None, "points": []})
            same_text(where, f"{chart['setup']}, {chart['direction']}", f"{setup['setup']}, {direction}")
            told = {point["phantom_session"]: point for point in chart["points"]}
            same_text(f"{where}, sessions", ", ".join(told), ", ".join(period.session for period in measured))
            for run in _comparable(setup, measured, direction):
                for index, period in enumerate(run):
                    point = told[period.session]
                    _check_point(f"{where}, {period.session}", point, period, direction, _limits(run, index, direction))
                    beyond[period.name] += point["beyond"]
                    count += 3
    if next(charts, None) is not None:
        raise DisagreementError("plan.json, drift", "has a chart of fewer than two measured sessions")
    for name, number in beyond.items():
        flagged = sum(flag["code"] == "width_drifts" for flag in bag.planned_periods[name]["flags"])
        same_text(f"plan.json, period {name}, flags width_drifts", flagged, number)
    return count


def _comparable(setup: Record, measured: list[Period], direction: str) -> list[list[Period]]:
    """Sessions in runs: a change of the setup or another kind of phantom begins a new one."""
    runs = [[measured[0]]]
    for before, period in pairwise(measured):
        changed = any(before.acquired < day <= period.acquired for day in setup["changed"])
        if changed or before.source[direction] != period.source[direction]:
            runs.append([])
        runs[-1].append(period)
    return runs


def _limits(run: list[Period], index: int, direction: str) -> Limits:
    """Mean of the whole run and three sigmas from its moving ranges; in a short one, of the sessions before."""
    widths = [period.measured[direction] or 0.0 for period in run]
    errors = [period.se[direction] or 0.0 for period in run]
    if len(run) >= CHART_SESSIONS:
        middle = math.fsum(widths) / len(widths)
        half = 3 * math.fsum(abs(b - a) for a, b in pairwise(widths)) / (len(widths) - 1) / 1.128
    elif index > 0:
        middle = math.fsum(widths[:index]) / index
        half = 3 * math.sqrt(math.fsum(e * e for e in errors[:index]) / index**2 + errors[index] ** 2)
    else:
        return None
    return middle - half, middle + half


def _check_point(where: str, point: Record, period: Period, direction: str, limits: Limits) -> None:
    same_text(f"{where}, acquired", point["acquired"], period.acquired)
    same_number(f"{where}, fwhm_mm", point["fwhm_mm"], period.measured[direction])
    low, high = limits or (None, None)
    same_number(f"{where}, low_mm", point["low_mm"], low)
    same_number(f"{where}, high_mm", point["high_mm"], high)
    outside = limits is not None and not point["low_mm"] <= point["fwhm_mm"] <= point["high_mm"]
    same_text(f"{where}, beyond", point["beyond"], outside)
