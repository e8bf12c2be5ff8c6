"""A period and a scan while the plan is made."""

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

from evenblur.plan.combining import DIRECTIONS, PeriodWidth
from evenblur.plan.sessions import PhantomSession
from evenblur.study.rows import ScanRow, SetupRow

Record = Mapping[str, Any]


@dataclass
class PeriodDraft:
    """A period while the plan is made."""

    setup: SetupRow
    label: str
    session: PhantomSession | None
    widths: dict[str, PeriodWidth | None]
    flags: list[dict[str, Any]]
    in_use: bool = False
    status: str = "unmeasured"
    rule: str = "quadrature"
    kernel: dict[str, float | None] = field(default_factory=lambda: dict.fromkeys(DIRECTIONS))
    quadrature: dict[str, float | None] = field(default_factory=lambda: dict.fromkeys(DIRECTIONS))

    @property
    def name(self) -> str:
        """Its short name, `SETUP.PHANTOMSESSION`."""
        return f"{self.setup.setup}.{self.label}"

    @property
    def speaking(self) -> tuple[str, ...]:
        """Labels of the phantoms that its widths come from; all of its session where none was measured."""
        found = [label for width in self.widths.values() if width is not None for label in width.phantoms]
        if not found and self.session is not None:
            found = [row.phantom for row in self.session.phantoms]
        return tuple(dict.fromkeys(found))

    @property
    def whole(self) -> dict[str, PeriodWidth] | None:
        """Its widths where both directions have one."""
        found = {direction: width for direction, width in self.widths.items() if width is not None}
        return found if len(found) == len(DIRECTIONS) else None


@dataclass
class ScanDraft:
    """A scan while the plan is made."""

    row: ScanRow
    intake: Record
    period: PeriodDraft | None = None
    days: int | None = None
    reasons: list[str] = field(default_factory=list)
    notes: dict[str, str] = field(default_factory=dict)
    flags: list[dict[str, Any]] = field(default_factory=list)

    def hold(self, code: str, note: str = "") -> None:
        """Hold the scan for a reason, once, with what is known about it."""
        if code not in self.reasons:
            self.reasons.append(code)
            self.notes[code] = note

    def flag(self, code: str, text: str, value: float | None = None) -> None:
        """Say something about the scan that does not hold it."""
        self.flags.append({"code": code, "text": text, "value": value})
