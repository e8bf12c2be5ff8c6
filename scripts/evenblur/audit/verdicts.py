"""What the records prove about a period: the uncertainty of its resulting width, and its verdict.

A period's verdict is the worst of its two directions, in the order of `PRECEDENCE`: first what leaves the period
out (`unmeasured`, `coarser`), then what was shown to be wrong (`fail`), then what nobody showed (`declared`), then
what was shown too loosely (`unproven`); `pass` only when neither direction has any of these.
"""

from collections.abc import Iterable
from dataclasses import dataclass

PRECEDENCE = ("unmeasured", "coarser", "fail", "declared", "unproven", "pass")
"""Verdicts, the one that wins first."""

_DECIMALS = 6
# Records round widths to 0.0001 mm; comparing at 1e-6 mm keeps 7.3 + 0.3 against 7.6 free of binary remainders.


@dataclass(frozen=True)
class DirectionFacts:
    """What is known of one direction of a period; widths in mm, None where there is none.

    `source` is the phantom kind that measured the width, or `declared`, or None. `statistical_se_mm` is the
    measurement's own standard error (jackknife), without the study's repeatability.
    """

    measured_mm: float | None
    statistical_se_mm: float | None
    target_mm: float | None
    achieved_mm: float | None
    source: str | None


def resulting_se(*, measured_mm: float | None, se_mm: float | None, target_mm: float | None) -> float | None:
    """Standard error (mm) of the width that a period's scans really have after smoothing to the target.

    By quadrature result² = measured² + kernel², so d(result) = measured / result · d(measured): the error shrinks by
    measured / target. None where one of the three is None.

    Raises
    ------
    ValueError
        If the target is not positive.

    >>> resulting_se(measured_mm=3.0, se_mm=0.5, target_mm=6.0)
    0.25
    """
    if measured_mm is None or se_mm is None or target_mm is None:
        return None
    if target_mm <= 0:
        raise ValueError(f"the target width must be positive, not {target_mm} mm")
    return measured_mm * se_mm / target_mm


def direction_verdict(facts: DirectionFacts, *, tolerance_mm: float) -> str:
    """Verdict on one direction: one word of `PRECEDENCE`.

    A direction that was measured but has no achieved width is `unproven`: nothing shows that it reached the target.

    >>> direction_verdict(DirectionFacts(5.0, 0.1, 7.0, 7.05, "point_source"), tolerance_mm=0.3)
    'pass'
    """
    if facts.measured_mm is None:
        return "unmeasured"
    if facts.target_mm is not None and _above(facts.measured_mm - facts.target_mm, tolerance_mm):
        return "coarser"
    if facts.source == "declared":
        return "declared"
    if facts.target_mm is None or facts.achieved_mm is None:
        return "unproven"
    if _above(abs(facts.achieved_mm - facts.target_mm), tolerance_mm):
        return "fail"
    se_mm = resulting_se(measured_mm=facts.measured_mm, se_mm=facts.statistical_se_mm, target_mm=facts.target_mm)
    return "unproven" if se_mm is None or _above(se_mm, tolerance_mm / 2) else "pass"


def _above(value: float, limit: float) -> bool:
    return round(value - limit, _DECIMALS) > 0


def period_verdict(directions: Iterable[DirectionFacts], *, status: str, tolerance_mm: float) -> str:
    """Verdict on a period: the worst of its directions and of the plan's own status.

    `status` is the plan's word (`smooth`, `at_target`, `coarser`, `unmeasured`); the last two are verdicts already.

    >>> fine = DirectionFacts(5.0, 0.1, 7.0, 7.05, "point_source")
    >>> period_verdict([fine, fine], status="coarser", tolerance_mm=0.3)
    'coarser'
    """
    found = {direction_verdict(facts, tolerance_mm=tolerance_mm) for facts in directions}
    if status in ("unmeasured", "coarser"):
        found.add(status)
    return min(found, key=PRECEDENCE.index)
