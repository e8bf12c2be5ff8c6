"""What the common width costs: what small objects keep of their activity, and what is left of the noise."""

from dataclasses import dataclass
from html import escape

import numpy as np

from evenblur.audit import model
from evenblur.audit.charts import Chart, Series
from evenblur.audit.curves import Pair
from evenblur.audit.expected import SPHERES_MM, centre_recovery, mean_recovery

_DIAMETERS = np.linspace(3.0, 40.0, 75)
_ROW, _WIDTH = 24.0, 1084.0


@dataclass(frozen=True)
class CostRow:
    """Recovery of one sphere: (centre, mean) at the finest period's width, the coarsest's in use, and the target's."""

    diameter_mm: float
    readings: tuple[tuple[float, float], ...]


@dataclass(frozen=True)
class Cost:
    """Recovery by size: what the columns stand for, the table, and the figure."""

    columns: tuple[str, ...]
    rows: tuple[CostRow, ...]
    pair: Pair


def mean_width(in_plane_mm: float | None, axial_mm: float | None) -> float | None:
    """One width for three directions, two of them in-plane: the cube root of their product; None where one is unknown.

    >>> mean_width(8.0, 8.0), mean_width(8.0, None)
    (8.0, None)
    """
    if not in_plane_mm or not axial_mm:
        return None
    return round(float((in_plane_mm**2 * axial_mm) ** (1.0 / 3.0)), 6)


def recovery_cost(record: model.AuditRecord) -> Cost | None:
    """Recovery of hot spheres at the target and at the finest and the coarsest smoothed period's own width.

    None without a target or a period.
    """
    target = mean_width(record.target.in_plane_mm, record.target.axial_mm)
    used = [period for period in record.periods if period.status in ("smooth", "at_target")]
    widths = {
        period.name: width
        for period in used
        if (width := mean_width(period.measured_in_plane_mm, period.measured_axial_mm)) is not None
    }
    if target is None or not widths:
        return None
    finest, coarsest = min(widths, key=widths.__getitem__), max(widths, key=widths.__getitem__)
    cases = [("before", f"{finest}, as it came", widths[finest])]
    if coarsest != finest:
        cases.append(("before doubt", f"{coarsest}, as it came", widths[coarsest]))
    cases.append(("after", "all, at the target", target))
    charts = []
    for words, reading in (("at its centre", centre_recovery), ("mean within its outline", mean_recovery)):
        charts.append(
            Chart(
                title=f"Recovery of a hot sphere, {words}, by its diameter",
                told="The numbers stand in the table below.",
                x_label="inner diameter of the sphere, mm",
                y_label=f"recovery, {words}",
                series=[
                    Series(
                        f"{name} ({width:.2f} mm)", [(float(d), reading(d, fwhm_mm=width)) for d in _DIAMETERS], look
                    )
                    for look, name, width in cases
                ],
                x_range=(0.0, 40.0),
                y_range=(0.0, 1.0),
            )
        )
    rows = [
        CostRow(size, tuple((centre_recovery(size, fwhm_mm=w), mean_recovery(size, fwhm_mm=w)) for _, _, w in cases))
        for size in SPHERES_MM
    ]
    return Cost(
        columns=tuple(f"{name} ({width:.2f} mm)" for _, name, width in cases),
        rows=tuple(rows),
        pair=Pair("Recovery by size", "", tuple(charts)),
    )


def noise_svg(record: model.AuditRecord, *, name: str) -> str | None:
    """What smoothing leaves of voxel noise in each period, as bars with numbers; None where no scan was smoothed."""
    rows = [(period.name, period.noise_factor) for period in record.periods if period.noise_factor is not None]
    if not rows:
        return None
    left = 12.0 + 6.6 * max(len(label) for label, _ in rows)
    right = _WIDTH - 60.0
    parts = []
    for number, (label, factor) in enumerate(rows):
        top = 6.0 + number * _ROW
        end = left + (right - left) * min(factor, 1.0)
        parts.append(f'<text class="end" x="{left - 8:.1f}" y="{top + 14:.1f}">{escape(label)}</text>')
        parts.append(f'<path class="bar" d="M{left:.1f} {top + 3:.1f}H{end:.1f}V{top + 17:.1f}H{left:.1f}z"/>')
        parts.append(f'<text x="{end + 7:.1f}" y="{top + 14:.1f}">{factor:.2f}</text>')
    bottom = 8.0 + len(rows) * _ROW
    for value in (0.0, 0.25, 0.5, 0.75, 1.0):
        at = left + (right - left) * value
        parts.append(f'<path class="grid" d="M{at:.1f} 4V{bottom:.1f}"/>')
        parts.append(f'<text class="mid" x="{at:.1f}" y="{bottom + 15:.1f}">{value:g}</text>')
    words = "share of the standard deviation that is left"
    parts.append(f'<text class="mid" x="{(left + right) / 2:.1f}" y="{bottom + 32:.1f}">{words}</text>')
    told = "; ".join(f"{label} {factor:.2f}" for label, factor in rows)
    return (
        f'<svg class="chart" viewBox="0 0 {_WIDTH:g} {bottom + 40:.1f}" role="img" aria-labelledby="{name}-title" '
        f'aria-describedby="{name}-desc"><title id="{name}-title">What smoothing leaves of voxel noise</title>'
        f'<desc id="{name}-desc">{escape(told)}</desc>{"".join(parts)}</svg>'
    )
