"""Find a period in a plan, and what proves its kernel."""

from typing import Any

from evenblur.errors import InputError


def find_period(plan: dict[str, Any], setup: str, phantom_session: str) -> dict[str, Any]:
    """A period of the plan.

    Raises
    ------
    InputError
        If the plan has no such period.
    """
    for period in plan["periods"]:
        if (period["setup"], period["phantom_session"]) == (setup, phantom_session):
            return dict(period)
    raise InputError("plan.json", f"has no period {setup}.{phantom_session}", "make the plan again")


def proving_phantoms(period: dict[str, Any]) -> dict[str, list[str]]:
    """Directions by phantom: whose images gave which width of a period; empty where nothing was measured."""
    directions: dict[str, list[str]] = {}
    for direction in ("in_plane", "axial"):
        for label in period["source_phantoms"][direction]:
            directions.setdefault(label, []).append(direction)
    return directions


def is_matched(period: dict[str, Any]) -> bool:
    """Whether a period's kernel can be matched: it is smoothed, and has a phantom to measure again."""
    return period["status"] == "smooth" and bool(proving_phantoms(period))


def is_proved(period: dict[str, Any]) -> bool:
    """Whether a period gets an achieved width: it has a kernel (or needs none) and a phantom to measure again."""
    return period["status"] in ("smooth", "at_target") and bool(proving_phantoms(period))
