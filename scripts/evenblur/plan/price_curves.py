"""The prices as a drawing: scans that each target takes in, and what it still shows of small structures."""

from collections.abc import Sequence
from html import escape

from evenblur.audit.panels import nice_ticks
from evenblur.partial_volume import slab_recovery, sphere_recovery
from evenblur.plan.prices import RIBBON_MM, SPHERES_MM, Price

_WIDTH, _LEFT, _RIGHT = 720.0, 46.0, 132.0
_UPPER, _LOWER, _BETWEEN, _TOP, _BELOW = 96.0, 190.0, 34.0, 22.0, 34.0
_STEPS = 80
_APART = 12.0  # least distance of two labels at the right end


def price_figure(prices: Sequence[Price], *, chosen: tuple[float, float] | None) -> str:
    """An SVG element over the targets: above the scans taken in, below the recovery of spheres and ribbon.

    Parameters
    ----------
    prices
        The table of prices, at least two different targets.
    chosen
        The plan's own target (in-plane, axial), mm, marked by a line.

    Returns
    -------
    str
        SVG with a title and a description; drawn in the page's colours.
    """
    targets = [price.in_plane_mm for price in prices]
    low, high = min(targets) - 0.3, max(targets) + 0.3
    most = max(price.scans_accepted for price in prices) or 1

    def x(value: float) -> float:
        return _LEFT + (value - low) / (high - low) * (_WIDTH - _LEFT - _RIGHT)

    upper, middle = _TOP + _UPPER, _TOP + _UPPER + _BETWEEN
    bottom = middle + _LOWER
    parts = [f'<text x="{_LEFT:g}" y="{_TOP - 9:g}">scans taken in</text>']
    parts += _frame(x, nice_ticks(low, high, most=8), top=_TOP, bottom=upper)
    for count in (0, most):
        parts.append(
            f'<text class="end" x="{_LEFT - 6:g}" y="{upper - _UPPER * count / most * 0.9 + 4:.1f}">{count}</text>'
        )
    for price in prices:
        height = 0.9 * _UPPER * price.scans_accepted / most
        bar = f'x="{x(price.in_plane_mm) - 4:.1f}" y="{upper - height:.1f}" width="8" height="{height:.1f}"'
        parts.append(f'<rect class="bar" {bar}><title>{escape(price.words)}: {price.scans_accepted}</title></rect>')
    parts.append(f'<text x="{_LEFT:g}" y="{middle - 9:g}">recovery in the middle</text>')
    parts += _frame(x, nice_ticks(low, high, most=8), top=middle, bottom=bottom)
    for share in (0.0, 0.25, 0.5, 0.75, 1.0):
        y = bottom - share * _LOWER
        parts.append(f'<path class="grid" d="M{_LEFT:g} {y:.1f}H{_WIDTH - _RIGHT:g}"/>')
        parts.append(f'<text class="end" x="{_LEFT - 6:g}" y="{y + 4:.1f}">{share:g}</text>')
    ends = []
    for words, kind, values in _curves(low, high):
        path = "L".join(f"{x(at):.1f} {bottom - value * _LOWER:.1f}" for at, value in values)
        parts.append(f'<path class="line {kind}" d="M{path}"/>')
        ends.append((bottom - values[-1][1] * _LOWER, words))
    at = -_APART
    for y, words in sorted(ends):
        at = max(y, at + _APART)
        parts.append(f'<text x="{_WIDTH - _RIGHT + 8:g}" y="{at + 4:.1f}">{escape(words)}</text>')
    if chosen is not None:
        parts.append(f'<path class="chosen" d="M{x(chosen[0]):.1f} {_TOP:g}V{bottom:g}"/>')
        parts.append(f'<text class="mid" x="{x(chosen[0]):.1f}" y="{_TOP - 9:g}">the plan</text>')
    for value in nice_ticks(low, high, most=8):
        parts.append(f'<text class="mid" x="{x(value):.1f}" y="{bottom + 15:g}">{value:g}</text>')
    centre = (_LEFT + _WIDTH - _RIGHT) / 2
    parts.append(f'<text class="mid" x="{centre:g}" y="{bottom + 30:g}">target (FWHM, mm; in-plane)</text>')
    told = "; ".join(f"{price.words}: {price.scans_accepted} scans" for price in prices)
    return (
        f'<svg viewBox="0 0 {_WIDTH:g} {bottom + _BELOW:g}" role="img" aria-labelledby="prices-title" '
        'aria-describedby="prices-desc"><title id="prices-title">Scans taken in and recovery, over the target</title>'
        f'<desc id="prices-desc">{escape(told)}. The numbers stand in the table of prices.</desc>'
        f"{''.join(parts)}</svg>"
    )


def _curves(low: float, high: float) -> list[tuple[str, str, list[tuple[float, float]]]]:
    widths = [low + (high - low) * step / _STEPS for step in range(_STEPS + 1)]
    curves = [
        (f"{size:g} mm sphere", "before", [(w, sphere_recovery(size, in_plane_mm=w, axial_mm=w)) for w in widths])
        for size in SPHERES_MM
    ]
    return [*curves, (f"{RIBBON_MM:g} mm ribbon", "after", [(w, slab_recovery(RIBBON_MM, fwhm_mm=w)) for w in widths])]


def _frame(x, ticks, *, top, bottom):  # type: ignore[no-untyped-def]
    lines = "".join(f"M{x(value):.1f} {top:g}V{bottom:g}" for value in ticks)
    yield f'<path class="grid" d="{lines}"/>'
    yield f'<path class="axis" d="M{_LEFT:g} {top:g}V{bottom:g}H{_WIDTH - _RIGHT:g}"/>'
