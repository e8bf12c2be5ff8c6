"""Drift: the widths of a setup over its phantom sessions, with control limits.

With many sessions the limits come from the sessions' own scatter, by Shewhart's chart for individual values: mean plus
or minus three sigmas, the sigma being the mean moving range over 1.128 (NIST/SEMATECH e-Handbook of Statistical
Methods, 6.3.2.2; ISO 7870-2). With few sessions that scatter is not known; each session is then held against the mean
of those before it, with the standard errors that the plan gives them (the study's repeatability is in them).
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from itertools import pairwise
from math import hypot, sqrt
from typing import Any

from evenblur.plan.combining import DIRECTIONS, PeriodWidth, rounded
from evenblur.plan.sessions import PhantomSession
from evenblur.study.rows import SetupRow

CHART_SESSIONS = 10
"""Fewest sessions whose own scatter gives the limits (common practice, no source)."""

SIGMAS = 3.0
D2 = 1.128
"""Mean range of two normal values, in sigmas: 2 / sqrt(pi)."""


@dataclass(frozen=True)
class Limits:
    """Centre line and control limits, mm."""

    centre_mm: float
    low_mm: float
    high_mm: float


def individuals_limits(values_mm: Sequence[float]) -> Limits:
    """Limits of Shewhart's chart for individual values: mean ± 3 x (mean moving range) / 1.128.

    Raises
    ------
    ValueError
        With fewer than two values.

    >>> limits = individuals_limits([5.0, 5.2, 5.1, 5.3])
    >>> round(limits.centre_mm, 3), round(limits.high_mm - limits.centre_mm, 3)
    (5.15, 0.443)
    """
    if len(values_mm) < 2:
        raise ValueError("control limits need at least two values")
    centre = sum(values_mm) / len(values_mm)
    ranges = [abs(after - before) for before, after in pairwise(values_mm)]
    half = SIGMAS * sum(ranges) / len(ranges) / D2
    return Limits(centre, centre - half, centre + half)


def limits_from_before(earlier: Sequence[tuple[float, float]], se_mm: float) -> Limits:
    """Limits for one session from the (width, standard error) of those before it: their mean ± 3 combined errors.

    Parameters
    ----------
    earlier
        Widths and standard errors, mm; at least one.
    se_mm
        Standard error of the session that is judged, mm.

    >>> limits = limits_from_before([(5.0, 0.3)], 0.4)
    >>> limits.low_mm, limits.high_mm
    (3.5, 6.5)
    """
    centre = sum(width for width, _ in earlier) / len(earlier)
    own = sqrt(sum(se**2 for _, se in earlier)) / len(earlier)
    half = SIGMAS * hypot(own, se_mm)
    return Limits(centre, centre - half, centre + half)


def control_charts(
    setup: SetupRow, sessions: Sequence[tuple[PhantomSession, Mapping[str, PeriodWidth | None]]]
) -> list[dict[str, Any]]:
    """The charts of a setup: one a direction that two or more sessions measured.

    A chart starts anew where the setup was changed, and where another kind of phantom measured the width: a step there
    is no drift.

    Parameters
    ----------
    setup
        The setup's row; its `changed` days part the sessions.
    sessions
        The setup's phantom sessions, oldest first, with their widths by direction.

    Returns
    -------
    list of dict
        `setup`, `direction`, `words`, and `points`: `phantom_session`, `acquired`, `fwhm_mm`, `low_mm`, `high_mm`,
        `beyond`, `why` (why a point has no limits).
    """
    charts = []
    for direction in DIRECTIONS:
        measured = [
            (session, width)
            for session, widths in sessions
            if (width := widths.get(direction)) is not None and width.source != "declared"
        ]
        if len(measured) > 1:
            points = [point for run in _runs(setup, measured) for point in run]
            shewhart = any(point["rule"] == "scatter" for point in points)
            charts.append(
                {
                    "setup": setup.setup,
                    "direction": direction,
                    "words": _words(shewhart),
                    "points": points,
                }
            )
    return charts


def _words(shewhart: bool) -> str:
    few = (
        "Limits: the mean of the sessions before, plus and minus three standard errors of the difference, the "
        "repeatability of sessions in them."
    )
    many = (
        f"With {CHART_SESSIONS} sessions and more the limits come from their own scatter: mean plus and minus 2.66 "
        "mean moving ranges."
    )
    return f"{few} {many}" if shewhart else few


Measured = tuple[PhantomSession, PeriodWidth]


def _runs(setup: SetupRow, measured: Sequence[Measured]) -> list[list[dict[str, Any]]]:
    """Sessions that can be compared with each other, as lists of points."""
    runs: list[tuple[str, list[Measured]]] = [("the first session", [])]
    for session, width in measured:
        so_far = runs[-1][1]
        if so_far:
            before, width_before = so_far[-1]
            if any(before.acquired < day <= session.acquired for day in setup.changed):
                runs.append(("the first after a change of the setup", []))
            elif width_before.source != width.source:
                runs.append(("another kind of phantom than before", []))
        runs[-1][1].append((session, width))
    return [_points(why, run) for why, run in runs]


def _points(why: str, run: Sequence[Measured]) -> list[dict[str, Any]]:
    own_scatter = individuals_limits([width.fwhm_mm for _, width in run]) if len(run) >= CHART_SESSIONS else None
    points = []
    for index, (session, width) in enumerate(run):
        limits = own_scatter
        if limits is None and index > 0:
            limits = limits_from_before([(w.fwhm_mm, w.se_mm) for _, w in run[:index]], width.se_mm)
        low, high = (None, None) if limits is None else (rounded(limits.low_mm), rounded(limits.high_mm))
        beyond = low is not None and high is not None and not low <= width.fwhm_mm <= high
        points.append(
            {
                "phantom_session": session.label,
                "acquired": session.acquired.isoformat(),
                "fwhm_mm": width.fwhm_mm,
                "low_mm": low,
                "high_mm": high,
                "beyond": beyond,
                "why": why if limits is None else "",
                "rule": "scatter" if own_scatter is not None else "errors",
            }
        )
    return points


def drift_flag(chart: Mapping[str, Any], point: Mapping[str, Any]) -> dict[str, Any]:
    """The flag of a session that lies beyond its limits."""
    text = (
        f"the {chart['direction'].replace('_', '-')} width of {chart['setup']} in session {point['phantom_session']} "
        f"is {point['fwhm_mm']:.2f} mm, beyond the control limits of {point['low_mm']:.2f} to {point['high_mm']:.2f} mm"
    )
    return {"code": "width_drifts", "text": text, "value": point["fwhm_mm"]}
