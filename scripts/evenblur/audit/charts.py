"""Plain line charts as SVG text: the page's style gives colours and fonts, so that dark mode and print reach in."""

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from html import escape

from evenblur.audit.panels import nice_ticks

_WIDTH, _LEFT, _RIGHT, _TOP, _BELOW = 520.0, 46.0, 12.0, 10.0, 40.0
_DOT, _DIAMOND = 3.0, 4.2
_LETTER = 5.9  # mean width of a letter at 11 px, for names that stand beside points

Point = tuple[float, float]


@dataclass(frozen=True)
class Series:
    """One line of a chart: its points, how it looks (classes of the page's style), its marks and its name.

    `marks` is "dot", "diamond" or nothing; `bars` are (x, low, high); `tag` stands at the last point.
    """

    name: str
    points: Sequence[Point]
    look: str
    line: bool = True
    marks: str = ""
    bars: Sequence[tuple[float, float, float]] = ()
    tag: str = ""


@dataclass(frozen=True)
class Chart:
    """One chart. `x_ticks` are (place, words) where round numbers would not do; the ranges hold all of the data."""

    title: str
    told: str
    x_label: str
    y_label: str
    series: Sequence[Series]
    x_range: Point
    y_range: Point
    x_ticks: Sequence[tuple[float, str]] | None = None
    height: float = 250.0
    levels: Sequence[tuple[float, str]] = field(default=())


def chart_svg(chart: Chart, *, name: str) -> str:
    """A chart as an SVG element with a title and a description; every text in it is escaped.

    Parameters
    ----------
    chart
        What to draw; points beyond the ranges are left out.
    name
        Prefix of the ids in the drawing: unique in the page.

    Examples
    --------
    >>> line = Series("a", [(0.0, 0.0), (1.0, 2.0)], "before")
    >>> svg = chart_svg(Chart("T", "D", "x", "y", [line], (0.0, 1.0), (0.0, 2.0)), name="c")
    >>> svg.startswith('<svg class="chart" viewBox="0 0 520 300"'), svg.count('<path class="line before"')
    (True, 1)
    """
    x = _Map(chart.x_range, _LEFT, _WIDTH - _RIGHT)
    y = _Map(chart.y_range, _TOP + chart.height, _TOP)
    parts = [*_frame(chart, x, y)]
    for series in chart.series:
        parts += _drawn(series, x, y)
    parts += _tags(chart, x, y)
    height = _TOP + chart.height + _BELOW
    return (
        f'<svg class="chart" viewBox="0 0 {_WIDTH:g} {height:g}" role="img" aria-labelledby="{name}-title" '
        f'aria-describedby="{name}-desc"><title id="{name}-title">{escape(chart.title)}</title>'
        f'<desc id="{name}-desc">{escape(chart.told)}</desc>{"".join(parts)}</svg>'
    )


class _Map:
    """A straight map from data to the drawing."""

    def __init__(self, data: Point, at_low: float, at_high: float) -> None:
        self.low, high = data
        self.high = high if high > self.low else self.low + 1.0
        self.at_low, self.at_high = at_low, at_high

    def __call__(self, value: float) -> float:
        return self.at_low + (value - self.low) / (self.high - self.low) * (self.at_high - self.at_low)

    def holds(self, value: float) -> bool:
        slack = 1e-9 * (self.high - self.low)
        return self.low - slack <= value <= self.high + slack


def _frame(chart: Chart, x: _Map, y: _Map) -> Iterator[str]:
    bottom, right = _TOP + chart.height, _WIDTH - _RIGHT
    across = chart.x_ticks
    if across is None:
        across = [(value, _words(value)) for value in nice_ticks(x.low, x.high, most=7)]
    up = nice_ticks(y.low, y.high, most=6)
    grid = "".join(f"M{x(at):.1f} {_TOP:g}V{bottom:g}" for at, _ in across)
    grid += "".join(f"M{_LEFT:g} {y(value):.1f}H{right:g}" for value in up)
    yield f'<path class="grid" d="{grid}"/><path class="axis" d="M{_LEFT:g} {_TOP:g}V{bottom:g}H{right:g}"/>'
    for at, words in across:
        yield f'<text class="mid" x="{x(at):.1f}" y="{bottom + 15:g}">{escape(words)}</text>'
    for value in up:
        yield f'<text class="end" x="{_LEFT - 6:g}" y="{y(value) + 4:.1f}">{_words(value)}</text>'
    yield f'<text class="mid" x="{(_LEFT + right) / 2:g}" y="{bottom + 32:g}">{escape(chart.x_label)}</text>'
    middle = _TOP + chart.height / 2
    yield f'<text class="mid" transform="translate(11 {middle:g}) rotate(-90)">{escape(chart.y_label)}</text>'
    for value, words in chart.levels:
        if y.holds(value):
            yield f'<path class="level" d="M{_LEFT:g} {y(value):.1f}H{right:g}"/>'
            yield f'<text class="end level" x="{right - 3:g}" y="{y(value) - 4:.1f}">{escape(words)}</text>'


def _drawn(series: Series, x: _Map, y: _Map) -> Iterator[str]:
    seen = [(x(a), y(b)) for a, b in series.points if x.holds(a) and y.holds(b)]
    title = f"<title>{escape(series.name)}</title>"
    if series.line and len(seen) > 1:
        path = "L".join(f"{a:.1f} {b:.1f}" for a, b in seen)
        yield f'<path class="line {series.look}" d="M{path}">{title}</path>'
    bars = "".join(
        f"M{x(a):.1f} {y(min(max(low, y.low), y.high)):.1f}V{y(min(max(high, y.low), y.high)):.1f}"
        for a, low, high in series.bars
    )
    if bars:
        yield f'<path class="line {series.look}" d="{bars}"/>'
    if series.marks:
        r, d = _DOT, _DIAMOND
        shape = (
            f"l{d} {d}l-{d} {d}l-{d}-{d}z"
            if series.marks == "diamond"
            else f"a{r} {r} 0 1 1 0 {2 * r}a{r} {r} 0 1 1 0-{2 * r}z"
        )
        up = d if series.marks == "diamond" else r
        path = "".join(f"M{a:.1f} {b - up:.1f}{shape}" for a, b in seen)
        yield f'<path class="mark {series.look}" d="{path}">{title}</path>'


def _tags(chart: Chart, x: _Map, y: _Map) -> Iterator[str]:
    """Names at the last points: from the left or the right of them, moved down where they would lie on each other."""
    placed: list[tuple[float, float, float]] = []
    wanted = [(x(s.points[-1][0]), y(s.points[-1][1]), s.tag) for s in chart.series if s.tag and s.points]
    for at, height, words in sorted(wanted, key=lambda one: one[1]):
        length = _LETTER * len(words)
        right = at + 8 + length <= _WIDTH
        start = at + 8 if right else at - 8 - length
        line = height + 4
        while any(start < end and begin < start + length and abs(line - other) < 12 for begin, end, other in placed):
            line += 4
        placed.append((start, start + length, line))
        place = f'x="{at + 8:.1f}"' if right else f'class="end" x="{at - 8:.1f}"'
        yield f'<text {place} y="{line:.1f}">{escape(words)}</text>'


def _words(value: float) -> str:
    return f"{value:g}".replace("-", "−")
