"""Profiles of phantoms as small drawings: data and fit before and after smoothing, and what the fit leaves.

Written as SVG text directly: a study of hundreds of periods has hundreds of panels, and a general plotting library
takes a third of a second for each. The page's style gives the colours, so that dark mode and print reach in.
"""

import math
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from html import escape
from typing import Any

_WIDTH, _LEFT, _RIGHT, _TOP = 340.0, 38.0, 8.0, 8.0
_MAIN, _BETWEEN, _STRIP, _BELOW = 128.0, 26.0, 46.0, 34.0  # heights: profile, words, residuals, axis
_LEAST_SPAN = 0.001  # share of the largest value: residuals below are rounding, and look as nothing
_DOT, _DIAMOND = 1.7, 2.6


@dataclass(frozen=True)
class Panel:
    """One phantom before and after smoothing; each profile as `Measurement.fit["profile"]` (see phantoms/base.py)."""

    title: str
    subtitle: str
    before: Mapping[str, Any] | None
    after: Mapping[str, Any] | None


@dataclass(frozen=True)
class _Scale:
    """A straight map from data to the drawing."""

    low: float
    high: float
    at_low: float
    at_high: float

    def __call__(self, value: float) -> float:
        return self.at_low + (value - self.low) / (self.high - self.low) * (self.at_high - self.at_low)


def profile_panel(panel: Panel, *, name: str) -> str:
    """One panel as an SVG element: the profile, and below it the residuals of the fit before smoothing.

    Parameters
    ----------
    panel
        What to draw. Values are shown as shares of the largest measured one before smoothing (after it, where there
        is no before).
    name
        Prefix of the ids in the drawing: unique in the page.

    Returns
    -------
    str
        SVG with a title and a description for screen readers; every text in it is escaped.
    """
    pairs = {
        key: _points(profile, largest=_largest(panel))
        for key, profile in (("before", panel.before), ("after", panel.after))
        if profile is not None
    }
    left = residuals(panel)
    everything = [point for series in pairs.values() for points in series for point in points if point[1] is not None]
    xs, ys = [x for x, _ in everything] or [0.0, 1.0], [y for _, y in everything if y is not None] or [0.0, 1.0]
    x = _padded(min(xs), max(xs), _LEFT + 3.0, _WIDTH - _RIGHT - 3.0)
    y = _padded(min(0.0, *ys), max(ys), _TOP + _MAIN, _TOP + 3.0)
    bottom = _TOP + _MAIN
    parts = [*_grid_across(x, top=_TOP, bottom=bottom), *_grid_up(y, nice_ticks(y.low, y.high, most=5))]
    for key, (measured, fitted) in pairs.items():
        parts.append(f'<path class="line {key}" d="{_line(fitted, x, y)}"/>')
        parts.append(f'<path class="mark {key}" d="{_marks(measured, x, y, diamond=key == "after")}"/>')
    if left:
        span = _span([value for _, value in left if value is not None])
        top, bottom = bottom + _BETWEEN, bottom + _BETWEEN + _STRIP
        strip = _Scale(-span, span, bottom, top)
        parts += _grid_across(x, top=top, bottom=bottom)
        parts += _grid_up(strip, [-span, 0.0, span], percent=True)
        parts.append(f'<text x="{_LEFT:g}" y="{top - 7:g}">before: measured − fitted, % of the largest</text>')
        parts.append(f'<path class="mark before" d="{_marks(left, x, strip, diamond=False)}"/>')
    for value in nice_ticks(x.low, x.high, most=5):
        parts.append(f'<text class="mid" x="{x(value):.1f}" y="{bottom + 15:g}">{_number(value)}</text>')
    parts.append(f'<text class="mid" x="{(_LEFT + _WIDTH - _RIGHT) / 2:g}" y="{bottom + 30:g}">mm</text>')
    title = escape(f"{panel.title}: {panel.subtitle}")
    return (
        f'<svg viewBox="0 0 {_WIDTH:g} {bottom + _BELOW:g}" role="img" aria-labelledby="{name}-title" '
        f'aria-describedby="{name}-desc"><title id="{name}-title">{title}</title>'
        f'<desc id="{name}-desc">{escape(_told(panel))}</desc>{"".join(parts)}</svg>'
    )


def residuals(panel: Panel) -> list[tuple[float, float | None]]:
    """Measured minus fitted before smoothing: (position in mm, share of the largest measured value) a point.

    >>> profile = {"position_mm": [0.0, 2.0], "measured": [4.0, 1.0], "fitted": [3.9, 1.2]}
    >>> [(x, round(share, 6)) for x, share in residuals(Panel("A", "point source", profile, None))]
    [(0.0, 0.025), (2.0, -0.05)]
    """
    if panel.before is None:
        return []
    measured, fitted = _points(panel.before, largest=_largest(panel))
    return [
        (x, None if value is None or model is None else value - model)
        for (x, value), (_, model) in zip(measured, fitted, strict=False)
    ]


def _largest(panel: Panel) -> float:
    shown = panel.before or panel.after or {}
    return max((abs(value) for value in shown.get("measured") or [] if value is not None), default=1.0) or 1.0


def _points(profile: Mapping[str, Any], *, largest: float) -> tuple[list[tuple[float, float | None]], ...]:
    """Measured and fitted points; a list is empty where the profile has no such values."""
    x = [float(value) for value in profile["position_mm"]]
    found = []
    for key in ("measured", "fitted"):
        y = [None if value is None else value / largest for value in profile.get(key) or []]
        found.append(list(zip(x, y, strict=True)) if len(y) == len(x) else [])
    return tuple(found)


def _told(panel: Panel) -> str:
    shown = panel.before or panel.after or {}
    words = f"{shown.get('label') or 'Profile'}, in mm; points are data, lines are the fit."
    sizes = [abs(value) for _, value in residuals(panel) if value is not None]
    if not sizes:
        return words
    spread = math.sqrt(sum(size * size for size in sizes) / len(sizes))
    return (
        f"{words} Before smoothing the data depart from the fit by {100 * max(sizes):.2g} % of the largest value at "
        f"most, {100 * spread:.2g} % root mean square."
    )


def _padded(low: float, high: float, at_low: float, at_high: float) -> _Scale:
    return _Scale(low, high if high > low else low + 1.0, at_low, at_high)


def _span(values: Sequence[float]) -> float:
    """Half the height of the residuals' strip: 1, 2 or 5 times a power of ten, and at least 0.1 %."""
    most = max((abs(value) for value in values), default=0.0)
    size = 10.0 ** math.floor(math.log10(max(most, _LEAST_SPAN)))
    return next(step * size for step in (1.0, 2.0, 5.0, 10.0) if step * size >= max(most, _LEAST_SPAN) * (1 - 1e-9))


def nice_ticks(low: float, high: float, *, most: int) -> list[float]:
    """Round numbers between two ends, at most `most` of them and at least one where a round number lies there.

    >>> nice_ticks(-14.2, 15.1, most=5), nice_ticks(0.0, 1.02, most=5)
    ([-10.0, 0.0, 10.0], [0.0, 0.5, 1.0])
    """
    size = 10.0 ** math.floor(math.log10((high - low) / most))
    for step in (1.0, 2.0, 5.0, 10.0, 20.0):
        first, last = math.ceil(low / (step * size) - 1e-9), math.floor(high / (step * size) + 1e-9)
        if last - first < most:
            return [round(number * step * size, 12) for number in range(first, last + 1)]
    return []


def _number(value: float) -> str:
    return f"{value:g}".replace("-", "−")


def _grid_across(x: _Scale, *, top: float, bottom: float) -> Iterator[str]:
    lines = "".join(f"M{x(value):.1f} {top:g}V{bottom:g}" for value in nice_ticks(x.low, x.high, most=5))
    yield f'<path class="grid" d="{lines}"/>'
    yield f'<path class="axis" d="M{_LEFT:g} {top:g}V{bottom:g}H{_WIDTH - _RIGHT:g}"/>'


def _grid_up(y: _Scale, ticks: Sequence[float], *, percent: bool = False) -> Iterator[str]:
    lines = "".join(f"M{_LEFT:g} {y(value):.1f}H{_WIDTH - _RIGHT:g}" for value in ticks)
    yield f'<path class="grid" d="{lines}"/>'
    for value in ticks:
        words = _number(round(100.0 * value, 9)) if percent else _number(value)
        yield f'<text class="end" x="{_LEFT - 6:g}" y="{y(value) + 4:.1f}">{words}</text>'


def _line(points: Sequence[tuple[float, float | None]], x: _Scale, y: _Scale) -> str:
    parts, pen = [], "M"
    for at, value in points:
        if value is None:
            pen = "M"
            continue
        parts.append(f"{pen}{x(at):.1f} {y(value):.1f}")
        pen = "L"
    return "".join(parts)


def _marks(points: Sequence[tuple[float, float | None]], x: _Scale, y: _Scale, *, diamond: bool) -> str:
    """Diamonds, or circles of two arcs, as one path: far smaller than an element a point."""
    r, d = _DOT, _DIAMOND
    shape = f"l{d} {d}l-{d} {d}l-{d}-{d}z" if diamond else f"a{r} {r} 0 1 1 0 {2 * r}a{r} {r} 0 1 1 0-{2 * r}z"
    up = d if diamond else r
    return "".join(f"M{x(at):.1f} {y(value) - up:.1f}{shape}" for at, value in points if value is not None)
