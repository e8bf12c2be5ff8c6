"""95 % intervals of measured and resulting widths."""

import math

from scipy.special import stdtrit

from evenblur.audit.inputs import AuditInput
from evenblur.audit.periods import Period

_NORMAL_95 = 1.959964  # 97.5 % point of the normal distribution


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


def period_intervals(audit: AuditInput, period: Period, name: str) -> tuple[float | None, float | None]:
    """Half intervals (mm) of a period's measured width and of its scans' resulting width in one direction.

    The second is the first carried through the smoothing: times measured / target.
    """
    side = period.in_plane if name == "in_plane" else period.axial
    records = [audit.resolution.get(label, {}) for label in period.phantoms]
    widths = [record.get(name) or {} for record in records if record.get("kind") == side.facts.source]
    degrees = min((width["df"] for width in widths if width.get("df")), default=None)
    half = half_interval(
        side.facts.statistical_se_mm,
        total_se_mm=side.se_mm,
        degrees=degrees,
        repeatability_mm=audit.settings["phantoms"]["repeatability_mm"],
    )
    facts = side.facts
    if half is None or not facts.target_mm or facts.measured_mm is None:
        return half, None
    return half, half * facts.measured_mm / facts.target_mm
