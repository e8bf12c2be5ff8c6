"""From the phantoms of a session to one width a direction."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from math import hypot, sqrt
from typing import Any

DIRECTIONS = ("in_plane", "axial")


def rounded(value: float) -> float:
    """A width or standard error as records keep it: to 0.0001 mm."""
    return round(float(value), 4)


@dataclass(frozen=True)
class PeriodWidth:
    """The width of a period in one direction.

    Attributes
    ----------
    fwhm_mm
        The width, mm.
    se_mm
        Its standard error with the session-to-session repeatability, mm.
    statistical_se_mm
        Its standard error from the images alone, mm; None where they gave none.
    source
        The kind of phantom, or `declared`.
    phantoms
        Labels of the phantoms that gave it.
    flags
        What a reader should know.
    other_kinds
        Widths of other kinds of phantom, with their difference.
    """

    fwhm_mm: float
    se_mm: float
    statistical_se_mm: float | None
    source: str
    phantoms: tuple[str, ...] = ()
    flags: tuple[dict[str, Any], ...] = ()
    other_kinds: tuple[dict[str, Any], ...] = field(default=())


def average(values: Sequence[tuple[float, float | None]]) -> tuple[float, float | None]:
    """Mean of the widths of phantoms of one kind, and its standard error.

    The mean is the plain one: the standard errors rest on some dozen blocks each, and weights from such uncertain
    numbers cost more than they gain. The error is the larger of what the single errors combine to and of what the
    widths' scatter shows; None where a phantom has no error and there are too few phantoms to see the scatter.

    >>> average([(5.0, 0.1), (5.2, 0.1)])
    (5.1, 0.1)
    """
    count = len(values)
    mean = sum(value for value, _ in values) / count
    errors = [error for _, error in values]
    known = [error for error in errors if error is not None]
    combined = sqrt(sum(error**2 for error in known)) / count if len(known) == count else None
    scatter = None
    if count > 1:
        scatter = sqrt(sum((value - mean) ** 2 for value, _ in values) / (count - 1) / count)
    if combined is None:
        # Without every single error the scatter of three or more phantoms is the only honest witness.
        return rounded(mean), rounded(scatter) if scatter is not None and count >= 3 else None
    return rounded(mean), rounded(max(combined, scatter or 0.0))


def period_width(
    direction: str,
    *,
    records: Sequence[Mapping[str, Any]],
    prefer: Sequence[str],
    repeatability_mm: float,
    declared_mm: float | None = None,
    declared_se_mm: float = 1.0,
) -> PeriodWidth | None:
    """The width of a period in one direction, from its phantoms' resolution records or the setup's declaration.

    Parameters
    ----------
    direction
        `in_plane` or `axial`.
    records
        Resolution records of the session's phantoms.
    prefer
        Kinds in order of trust; a kind that is not listed counts after those that are.
    repeatability_mm
        Session-to-session scatter (mm), added to the standard error in quadrature.
    declared_mm, declared_se_mm
        The setup's declared width and its standard error, mm.

    Returns
    -------
    PeriodWidth or None
        None where the direction is neither measured nor declared.
    """
    by_kind: dict[str, list[Mapping[str, Any]]] = {}
    for record in records:
        if record.get(direction) is not None:
            by_kind.setdefault(str(record["kind"]), []).append(record)
    order = [kind for kind in prefer if kind in by_kind] + sorted(set(by_kind) - set(prefer))
    if not order:
        if declared_mm is None:
            return None
        text = f"the {_words(direction)} width of {declared_mm:g} mm is declared, not measured"
        flag = {"code": "declared_width", "text": text, "value": declared_mm}
        error = rounded(hypot(declared_se_mm, repeatability_mm))
        return PeriodWidth(rounded(declared_mm), error, None, "declared", (), (flag,))
    averages = {kind: average([_value(record[direction]) for record in by_kind[kind]]) for kind in order}
    chosen = order[0]
    width, statistical = averages[chosen]
    flags: list[dict[str, Any]] = []
    if statistical is None:
        text = f"the {_words(direction)} width has no standard error of its own"
        flags.append({"code": "no_statistical_error", "text": text, "value": None})
    others = []
    for kind in order[1:]:
        other, other_error = averages[kind]
        difference = rounded(other - width)
        # Both were scanned together: the scatter from session to session enters only where nothing else is known.
        combined = rounded(hypot(*(repeatability_mm if e is None else e for e in (statistical, other_error))))
        others.append(
            {
                "kind": kind,
                "direction": direction,
                "fwhm_mm": other,
                "difference_mm": difference,
                "combined_se_mm": combined,
            }
        )
        if abs(difference) > 3 * combined:
            text = f"{kind} gives an {_words(direction)} width {difference:+.2f} mm from that of {chosen}"
            flags.append({"code": "kinds_disagree", "text": text, "value": difference})
    return PeriodWidth(
        fwhm_mm=width,
        se_mm=rounded(hypot(statistical or 0.0, repeatability_mm)),
        statistical_se_mm=statistical,
        source=chosen,
        phantoms=tuple(str(record["phantom"]) for record in by_kind[chosen]),
        flags=tuple(flags),
        other_kinds=tuple(others),
    )


def _value(width: Mapping[str, Any]) -> tuple[float, float | None]:
    error = width["se_mm"]
    return float(width["fwhm_mm"]), None if error is None else float(error)


def _words(direction: str) -> str:
    return direction.replace("_", "-")
