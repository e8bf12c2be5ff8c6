"""Which phantom session of a setup speaks for a scan's date."""

import datetime
from collections.abc import Iterable, Sequence
from dataclasses import dataclass

from evenblur.study.rows import PhantomRow, SetupRow


@dataclass(frozen=True)
class PhantomSession:
    """The phantom scans of one setup made together.

    Attributes
    ----------
    setup, label
        The setup and the session's label.
    acquired
        Day of its earliest phantom scan.
    valid_until
        Last day that it speaks for where the table says so: the earliest of its phantoms' days.
    phantoms
        Its phantom rows that are in use, in the table's order.
    """

    setup: str
    label: str
    acquired: datetime.date
    valid_until: datetime.date | None
    phantoms: tuple[PhantomRow, ...]


@dataclass(frozen=True)
class Choice:
    """The session that speaks for a scan, or the reason why none does."""

    session: PhantomSession | None
    reason: str | None
    note: str = ""


def group_sessions(phantoms: Iterable[PhantomRow]) -> dict[str, list[PhantomSession]]:
    """Phantom sessions by setup, oldest first. Phantoms with `use: no` do not count."""
    rows: dict[tuple[str, str], list[PhantomRow]] = {}
    for row in phantoms:
        if row.use == "yes":
            rows.setdefault((row.setup, row.phantom_session), []).append(row)
    sessions: dict[str, list[PhantomSession]] = {}
    for (setup, label), members in rows.items():
        limits = [row.valid_until for row in members if row.valid_until is not None]
        session = PhantomSession(
            setup, label, min(row.acquired for row in members), min(limits, default=None), tuple(members)
        )
        sessions.setdefault(setup, []).append(session)
    return {setup: sorted(found, key=lambda s: (s.acquired, s.label)) for setup, found in sessions.items()}


def choose_session(
    day: datetime.date,
    *,
    setup: SetupRow,
    sessions: Sequence[PhantomSession],
    rule: str,
    valid_days: int,
) -> Choice:
    """The phantom session that speaks for a scan of this day.

    Parameters
    ----------
    day
        Day of the scan.
    setup
        The setup's row; its `changed` days part phantoms from scans.
    sessions
        The setup's phantom sessions, oldest first.
    rule
        `latest_before` (the same day counts) or `nearest` (of two equally near the earlier).
    valid_days
        Days that a session speaks for where its table row gives no `valid_until`.

    Returns
    -------
    Choice
        A session, or a hold reason: `no_phantom_session`, `setup_changed`, `phantom_expired`.
    """
    candidates = [session for session in sessions if rule == "nearest" or session.acquired <= day]
    if not candidates:
        return Choice(None, "no_phantom_session", f"no phantom session of {setup.setup} on or before {day}")
    ranked = sorted(candidates, key=lambda session: (abs((day - session.acquired).days), session.acquired))
    free = [session for session in ranked if _change_between(setup, session.acquired, day) is None]
    if not free:
        changed = _change_between(setup, ranked[0].acquired, day)
        return Choice(None, "setup_changed", f"{setup.setup} changed on {changed}, between phantom and scan")
    best = free[0]
    if not _speaks(best, day, valid_days):
        age = abs((day - best.acquired).days)
        limit = f"until {best.valid_until}" if best.valid_until else f"for {valid_days} days"
        return Choice(None, "phantom_expired", f"phantom session {best.label} is {age} days away and holds {limit}")
    return Choice(best, None)


def _change_between(setup: SetupRow, phantom: datetime.date, scan: datetime.date) -> datetime.date | None:
    """The change that parts phantom and scan. On the day of a change a phantom counts as made after it."""
    early, late = sorted((phantom, scan))
    return next((change for change in sorted(setup.changed) if early < change <= late), None)


def _speaks(session: PhantomSession, day: datetime.date, valid_days: int) -> bool:
    if session.valid_until is not None and day >= session.acquired:
        return day <= session.valid_until
    return abs((day - session.acquired).days) <= valid_days
