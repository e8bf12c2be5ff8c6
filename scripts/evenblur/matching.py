"""Match a period's kernel: adjust it until the period's own phantom measures at the target.

Widths add in quadrature only where the blur is a Gaussian. A real point spread has tails, and then the smoothed phantom
measures beside the target. Each round corrects the kernel by what is missing, again in quadrature:
kernel² <- kernel² + target² - achieved².
"""

from collections.abc import Mapping, Sequence
from math import sqrt
from typing import Any

import evenblur
from evenblur.achieving import LoadedPhantom
from evenblur.phantoms.base import MeasurementError
from evenblur.plan.combining import DIRECTIONS, rounded

NEAR_MM = 0.005
"""The match ends when every measured direction lies this near to the target, mm."""
ROUNDS = 8


def match_kernel(
    phantoms: Sequence[LoadedPhantom],
    *,
    setup: str,
    phantom_session: str,
    kernel: Mapping[str, float],
    target: Mapping[str, float],
) -> dict[str, Any]:
    """Adjust a kernel until the phantoms, smoothed by it, measure at the target.

    Parameters
    ----------
    phantoms
        The phantoms that gave the period's widths; each speaks for its `directions`. A direction that none speaks
        for keeps its kernel.
    setup, phantom_session
        The period.
    kernel
        The kernel to start from, by direction, mm.
    target
        The common widths, by direction, mm.

    Returns
    -------
    dict
        The matching record: the kernel, `settled`, and the widths after each round. Where a smoothed phantom gives no
        width, or the rounds do not settle, `settled` is False and the kernel is the one to start from.
    """
    current = {direction: float(kernel[direction]) for direction in DIRECTIONS}
    rounds: list[dict[str, Any]] = []
    settled = False
    for _ in range(ROUNDS):
        achieved = _achieved(phantoms, current)
        rounds.append({"kernel": dict(current), "achieved": achieved})
        if achieved is None:
            break
        missing = {direction: target[direction] ** 2 - width**2 for direction, width in achieved.items()}
        if all(_settled(target[direction], width, current[direction]) for direction, width in achieved.items()):
            settled = True
            break
        for direction, share in missing.items():
            current[direction] = rounded(sqrt(max(current[direction] ** 2 + share, 0.0)))
    chosen = current if settled else {direction: float(kernel[direction]) for direction in DIRECTIONS}
    return {
        "setup": setup,
        "phantom_session": phantom_session,
        "kernel": {f"{direction}_mm": chosen[direction] for direction in DIRECTIONS},
        "settled": settled,
        "rounds": rounds,
        "method": {"name": "kernel matched to the target", "version": evenblur.__version__},
    }


def _settled(target_mm: float, achieved_mm: float, kernel_mm: float) -> bool:
    """Whether a direction needs no other kernel: at the target, or above it already without one."""
    return abs(target_mm - achieved_mm) <= NEAR_MM or (kernel_mm == 0.0 and achieved_mm > target_mm)


def _achieved(phantoms: Sequence[LoadedPhantom], kernel: Mapping[str, float]) -> dict[str, float] | None:
    """Mean width by direction after the kernel, over the phantoms that speak for it; None where one gives none."""
    widths: dict[str, list[float]] = {}
    for loaded in phantoms:
        try:
            measurement = loaded.measure_smoothed(kernel["in_plane"], kernel["axial"])
        except MeasurementError:
            return None
        for direction in loaded.phantom.directions:
            width = getattr(measurement, direction)
            if width is None:
                return None
            widths.setdefault(direction, []).append(float(width.fwhm_mm))
    return {direction: rounded(sum(found) / len(found)) for direction, found in widths.items()}
