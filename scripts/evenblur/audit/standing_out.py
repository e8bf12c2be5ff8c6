"""Which periods stand out from the others, and by what: for the reader's first glance."""

from collections.abc import Mapping, Sequence
from statistics import median

from evenblur.audit.periods import DIRECTIONS, Direction, Period
from evenblur.audit.queries import WORDS

FAR_OFF = 3.5
"""Robust deviations from the median beyond which a width counts as far off (0.6745 |x - median| / MAD, the limit that
Iglewicz and Hoaglin, How to Detect and Handle Outliers, 1993, recommend)."""

LEAST_SPREAD_MM = 0.1
"""A median absolute deviation below this counts as this: alike to a tenth of a millimetre is alike."""

FEWEST = 5
"""Periods that a comparison needs."""


def standing_out(periods: Sequence[Period], *, tolerance_mm: float) -> dict[str, list[str]]:
    """What sets each period apart, in words, by the period's name; an empty list where nothing does."""
    found: dict[str, list[str]] = {period.name: [] for period in periods}
    for name in DIRECTIONS:
        sides = {period.name: period.in_plane if name == "in_plane" else period.axial for period in periods}
        widths = {key: side.facts.measured_mm for key, side in sides.items() if side.facts.measured_mm is not None}
        for key, score in robust_scores(widths).items():
            if abs(score) > FAR_OFF:
                where = "above" if score > 0 else "below"
                found[key].append(f"{WORDS[name]} width {widths[key]:.2f} mm, far {where} the others")
        for key, side in sides.items():
            found[key] += _near_the_limit(side, WORDS[name], tolerance_mm)
        found_errors = {key: side.resulting_se_mm for key, side in sides.items() if side.resulting_se_mm is not None}
        usual = median(found_errors.values()) if len(found_errors) >= FEWEST else None
        for key, error in found_errors.items():
            if usual is not None and error > 2 * usual:
                found[key].append(
                    f"{WORDS[name]} result uncertain by {error:.2f} mm, against {usual:.2f} mm in the median period"
                )
    return found


def robust_scores(values: Mapping[str, float]) -> dict[str, float]:
    """How many robust deviations each value lies from the median; nothing for fewer than `FEWEST` values.

    >>> scores = robust_scores({"a": 5.0, "b": 5.2, "c": 5.4, "d": 5.6, "e": 9.0})
    >>> round(scores["e"], 3), scores["c"]
    (12.141, 0.0)
    """
    if len(values) < FEWEST:
        return {}
    middle = median(values.values())
    spread = max(median(abs(value - middle) for value in values.values()), LEAST_SPREAD_MM)
    return {key: 0.6745 * (value - middle) / spread for key, value in values.items()}


def _near_the_limit(side: Direction, word: str, tolerance_mm: float) -> list[str]:
    achieved, target = side.facts.achieved_mm, side.facts.target_mm
    if achieved is None or target is None or abs(achieved - target) <= tolerance_mm / 2:
        return []
    return [f"{word} achieved {achieved:.2f} mm, over half the tolerance from the target"]
