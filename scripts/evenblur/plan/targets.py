"""The common target: the coarsest period in use, or a fixed and approved width."""

from collections.abc import Sequence
from dataclasses import dataclass
from decimal import ROUND_CEILING, Decimal
from typing import Any

from evenblur.plan.combining import DIRECTIONS, PeriodWidth, rounded
from evenblur.study.settings import TargetPart


@dataclass(frozen=True)
class Candidate:
    """A period that may set the target: its name and its widths by direction."""

    name: str
    widths: dict[str, PeriodWidth]


@dataclass(frozen=True)
class Target:
    """The common widths, mm, and who or what decided them; None where nothing could."""

    in_plane_mm: float | None
    axial_mm: float | None
    choose: str
    decided_by: str
    on: str | None = None
    reason: str | None = None

    def mm(self, direction: str) -> float | None:
        """The target (mm) of `in_plane` or `axial`."""
        return self.in_plane_mm if direction == "in_plane" else self.axial_mm

    def record(self) -> dict[str, Any]:
        """The target as plan.json holds it."""
        return {
            "in_plane_mm": self.in_plane_mm,
            "axial_mm": self.axial_mm,
            "choose": self.choose,
            "decided_by": self.decided_by,
            "on": self.on,
            "reason": self.reason,
        }


def round_up(value_mm: float, step_mm: float) -> float:
    """The smallest multiple of the step that is not below the value, both to 0.0001 mm.

    >>> round_up(8.01, 0.1), round_up(8.1, 0.1)
    (8.1, 8.1)
    """
    value, step = Decimal(str(rounded(value_mm))), Decimal(str(step_mm))
    return rounded(float((value / step).to_integral_value(rounding=ROUND_CEILING) * step))


def decide_target(settings: TargetPart, candidates: Sequence[Candidate]) -> Target:
    """The common target of a study.

    Parameters
    ----------
    settings
        The block `target` of study.yaml.
    candidates
        Periods in use, each with a width in both directions.

    Returns
    -------
    Target
        For `coarsest` the largest of width + allowance_se x se over the candidates, a direction each, the larger of
        both where isotropic, rounded up. Without a width that may count, None in its place.
    """
    if settings.choose == "fixed":
        approval = settings.approval
        day = approval.on.isoformat() if approval.on else None
        return Target(
            rounded(settings.in_plane_mm or 0.0),
            rounded(settings.axial_mm or 0.0),
            "fixed",
            approval.by or "",
            day,
            approval.reason,
        )
    limits: dict[str, tuple[float, str]] = {}
    for direction in DIRECTIONS:
        for candidate in candidates:
            width = candidate.widths[direction]
            if width.source == "declared" and not settings.declared_counts:
                continue
            limit = rounded(width.fwhm_mm + settings.allowance_se * width.se_mm)
            if direction not in limits or limit > limits[direction][0]:
                words = direction.replace("_", "-")
                text = (
                    f"{candidate.name} {words}: {width.fwhm_mm:g} mm "
                    f"and {settings.allowance_se:g} standard errors of {width.se_mm:g} mm"
                )
                limits[direction] = (limit, text)
    if len(limits) < len(DIRECTIONS):
        return Target(None, None, "coarsest", "no width in use may set the target")
    if settings.isotropic:
        largest = max(limits.values())
        limits = dict.fromkeys(DIRECTIONS, largest)
    in_plane, axial = (round_up(limits[direction][0], settings.round_up_to_mm) for direction in DIRECTIONS)
    decided = "; ".join(dict.fromkeys(text for _, text in limits.values()))
    return Target(in_plane, axial, "coarsest", decided)
