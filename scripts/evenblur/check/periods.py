"""Every period's widths, target, kernel and verdict, worked out anew from the study's rows and the records.

The rules are those of the documentation. Widths and standard errors are rounded to 0.0001 mm wherever a record keeps
them, and what follows is worked out from the rounded numbers.
"""

import math
from dataclasses import dataclass, field
from decimal import ROUND_CEILING, Decimal

from evenblur.check.handover import DIRECTIONS, Handover, Record, entities

AFTER_KERNELS = frozenset({"unmeasured", "coarser_than_target", "oblique_grid", "too_few_slices"})
"""Reasons to hold a scan that depend on the target: they do not take its period out of use."""

Value = float | None


@dataclass
class Period:
    """A period, worked out anew. Widths in mm, by direction; None where there is none."""

    setup: str
    session: str
    phantoms: list[Record] = field(default_factory=list)
    acquired: str = ""
    valid_until: str = ""
    measured: dict[str, Value] = field(default_factory=dict)
    se: dict[str, Value] = field(default_factory=dict)
    statistical: dict[str, Value] = field(default_factory=dict)
    source: dict[str, str | None] = field(default_factory=dict)
    labels: dict[str, list[str]] = field(default_factory=dict)
    kernel: dict[str, Value] = field(default_factory=lambda: dict.fromkeys(DIRECTIONS))
    quadrature: dict[str, Value] = field(default_factory=lambda: dict.fromkeys(DIRECTIONS))
    rule: str = "quadrature"
    status: str = "unmeasured"
    in_use: bool = False

    @property
    def name(self) -> str:
        """Its name in the records."""
        return f"{self.setup}.{self.session}"


def four(value: float) -> float:
    """A width as records keep it."""
    return round(value, 4)


def list_periods(bag: Handover) -> dict[str, Period]:
    """All periods with their widths: one a phantom session, and one a setup whose width is only declared."""
    first: dict[str, str] = {}
    earlier = {}
    for row in bag.phantoms:
        picture, held = (bag.phantom_intake[row["phantom"]][name] for name in ("voxels_sha256", "holds"))
        if row["use"] == "yes" and picture and not held:
            earlier[row["phantom"]] = first.setdefault(picture, row["phantom"])
    periods: dict[str, Period] = {}
    for setup in bag.setups:
        sessions: dict[str, list[Record]] = {}
        for row in bag.phantoms:
            if row["use"] == "yes" and row["setup"] == setup["setup"]:
                sessions.setdefault(row["phantom_session"], []).append(row)
        found = [Period(setup["setup"], label, rows) for label, rows in sessions.items()]
        for period in found:
            period.acquired = min(row["acquired"] for row in period.phantoms)
            period.valid_until = min((r["valid_until"] for r in period.phantoms if r["valid_until"]), default="")
        found.sort(key=lambda period: (period.acquired, period.session))
        if not found and (setup["declared_in_plane_mm"] is not None or setup["declared_axial_mm"] is not None):
            found = [Period(setup["setup"], "declared")]
        for period in found:
            members = [row["phantom"] for row in period.phantoms]
            # The same picture twice in one session is one witness; one that its intake holds is none.
            single = [m for m in members if earlier.get(m, m) == m or earlier[m] not in members]
            single = [m for m in single if not bag.phantom_intake[m]["holds"]]
            for direction in DIRECTIONS:
                _give_width(bag, period, setup, direction, [m for m in single if m in bag.resolution])
            periods[period.name] = period
    _find_use(bag, periods)
    return periods


def _give_width(bag: Handover, period: Period, setup: Record, direction: str, labels: list[str]) -> None:
    rules = bag.settings["phantoms"]
    kinds: dict[str, list[str]] = {}
    for label in labels:
        record = bag.resolution[label]
        if record[direction] is not None:
            kinds.setdefault(record["kind"], []).append(label)
    chosen = next((kind for kind in [*rules["prefer"], *sorted(kinds)] if kind in kinds), None)
    declared = setup[f"declared_{direction}_mm"]
    width: Value
    if chosen is None:
        width, own = None if declared is None else four(declared), None
        error = None if declared is None else four(math.hypot(setup["declared_se_mm"], rules["repeatability_mm"]))
        chosen = None if declared is None else "declared"
        used: list[str] = []
    else:
        used = kinds[chosen]
        width, own = mean_width([bag.resolution[label][direction] for label in used])
        error = four(math.hypot(own or 0.0, rules["repeatability_mm"]))
    period.measured[direction], period.se[direction], period.statistical[direction] = width, error, own
    period.source[direction], period.labels[direction] = chosen, used


def mean_width(widths: list[Record]) -> tuple[float, Value]:
    """The plain mean of phantoms of one kind, and the larger of what their errors and their scatter say of it.

    >>> mean_width([{"fwhm_mm": 5.0, "se_mm": 0.1}, {"fwhm_mm": 5.4, "se_mm": 0.1}])
    (5.2, 0.2)
    """
    values = [width["fwhm_mm"] for width in widths]
    errors = [width["se_mm"] for width in widths]
    count, mean = len(values), math.fsum(values) / len(values)
    known = None if None in errors else math.sqrt(math.fsum(e * e for e in errors)) / count
    spread = math.sqrt(math.fsum((v - mean) ** 2 for v in values) / (count - 1) / count) if count > 1 else 0.0
    if known is not None:
        return four(mean), four(max(known, spread))
    return four(mean), four(spread) if count >= 3 else None


def _find_use(bag: Handover, periods: dict[str, Period]) -> None:
    for row in bag.scans:
        scan = bag.planned_scans.get(entities(row), {})
        period = periods.get(f"{row['setup']}.{scan.get('phantom_session')}")
        if period is not None and set(scan["reasons"]) <= AFTER_KERNELS:
            period.in_use = True


def own_target(bag: Handover, periods: dict[str, Period]) -> dict[str, Value]:
    """The target by direction: the fixed one, or the coarsest period in use with its allowance, rounded up."""
    rules = bag.settings["target"]
    if rules["choose"] == "fixed":
        return {direction: four(rules[f"{direction}_mm"]) for direction in DIRECTIONS}
    whole = [p for p in periods.values() if None not in p.measured.values()]
    candidates = [p for p in whole if p.in_use] or whole
    limits: dict[str, float] = {}
    for direction in DIRECTIONS:
        for period in candidates:
            width, error = period.measured[direction], period.se[direction]
            counts = period.source[direction] != "declared" or rules["declared_counts"]
            if width is None or error is None or not counts:
                continue
            limits[direction] = max(limits.get(direction, 0.0), four(width + rules["allowance_se"] * error))
    if len(limits) < len(DIRECTIONS):
        return dict.fromkeys(DIRECTIONS)
    if rules["isotropic"]:
        limits = dict.fromkeys(DIRECTIONS, max(limits.values()))
    return {direction: rounded_up(limits[direction], rules["round_up_to_mm"]) for direction in DIRECTIONS}


def rounded_up(value: float, step: float) -> float:
    """The smallest multiple of a step that is not below a value.

    >>> rounded_up(8.01, 0.1), rounded_up(8.1, 0.1), rounded_up(7.26, 0.25)
    (8.1, 8.1, 7.5)
    """
    width, unit = Decimal(repr(value)), Decimal(repr(step))
    return four(float((width / unit).to_integral_value(rounding=ROUND_CEILING) * unit))


def give_kernels(bag: Handover, periods: dict[str, Period], target: dict[str, Value]) -> None:
    """Each period's kernel and status: quadrature, small kernels left out, matched ones from the matching records."""
    tolerance = bag.settings["tolerance"]
    least = tolerance["no_kernel_below_mm"]
    for period in periods.values():
        if None in target.values() or None in period.measured.values():
            continue
        excess = {d: four((period.measured[d] or 0.0) - (target[d] or 0.0)) for d in DIRECTIONS}
        if max(excess.values()) > tolerance["achieved_mm"]:
            period.status = "coarser"
            continue
        for direction in DIRECTIONS:
            square = (target[direction] or 0.0) ** 2 - (period.measured[direction] or 0.0) ** 2
            period.quadrature[direction] = four(math.sqrt(max(square, 0.0)))
            period.kernel[direction] = _left_out(period.quadrature[direction], least)
        period.status = _status(period)
        record = bag.matching.get(period.name)
        if record is not None and record["settled"] and period.status == "smooth":
            period.rule = "matched"
            for direction in DIRECTIONS:
                if period.source[direction] != "declared":
                    period.kernel[direction] = _left_out(record["kernel"][f"{direction}_mm"], least)
            period.status = _status(period)


def _left_out(kernel: Value, least: float) -> float:
    return 0.0 if kernel is None or kernel < least else kernel


def _status(period: Period) -> str:
    return "smooth" if any(period.kernel.values()) else "at_target"


def own_verdict(bag: Handover, period: Period, target: dict[str, Value]) -> str:
    """A period's verdict: the worst of its directions."""
    if period.status in ("unmeasured", "coarser"):
        return period.status
    tolerance = bag.settings["tolerance"]["achieved_mm"]
    found = {_direction_verdict(bag, period, target[d], d, tolerance) for d in DIRECTIONS}
    return next(v for v in ("fail", "declared", "unproven", "pass") if v in found)


def _direction_verdict(bag: Handover, period: Period, aim: Value, direction: str, tolerance: float) -> str:
    achieved, own = achieved_width(bag, period, direction), period.statistical[direction]
    if period.source[direction] == "declared":
        return "declared"
    if achieved is None or not aim:
        return "unproven"
    # Widths have four decimals; what lies beyond six is the remainder of binary numbers.
    if round(abs(achieved - aim) - tolerance, 6) > 0:
        return "fail"
    if own is None or round((period.measured[direction] or 0.0) * own / aim - tolerance / 2, 6) > 0:
        return "unproven"
    return "pass"


def achieved_width(bag: Handover, period: Period, direction: str) -> Value:
    """The achieved width (mm) of a period in a direction."""
    width = bag.achieved.get(period.name, {}).get(direction)
    return None if width is None else width["fwhm_mm"]


def resulting_se(period: Period, target: dict[str, Value], direction: str) -> Value:
    """Standard error (mm) of the true result: measured x se / target."""
    width, error, aim = period.measured[direction], period.se[direction], target[direction]
    return None if width is None or error is None or not aim else width * error / aim
