"""The report's figures as SVG text that stands inside the page.

Deterministic: fixed hash salt, no date, no program name. Colours become CSS variables, so that the page's light,
dark and print styles reach into the figures; text stays text.
"""

import io
import re
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from html import escape
from typing import Any

import matplotlib as mpl
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D

# Drawn in these colours and replaced by the page's variables; each must be a colour that nothing else uses.
COLOURS = {
    "#010203": "var(--ink)",
    "#020304": "var(--faint)",
    "#030405": "var(--line)",
    "#040506": "var(--measured)",
    "#050607": "var(--target)",
    "#060708": "var(--achieved)",
    "#070809": "var(--paper)",
}
INK, FAINT, LINE, MEASURED, TARGET, ACHIEVED, PAPER = COLOURS

_STYLE: Any = {
    "text.parse_math": False,
    "svg.hashsalt": "evenblur",
    "svg.fonttype": "none",
    "font.family": "sans-serif",
    "font.size": 10,
    "axes.edgecolor": LINE,
    "axes.labelcolor": INK,
    "axes.titlecolor": INK,
    "axes.titley": 1.0,  # fixed: looking for free room above every panel is slow
    "axes.facecolor": "none",
    "text.color": INK,
    "xtick.color": FAINT,
    "ytick.color": FAINT,
    "xtick.labelcolor": INK,
    "ytick.labelcolor": INK,
    "grid.color": LINE,
    "grid.linewidth": 0.6,
    "legend.frameon": False,
}

_Point = tuple[float, float, float]  # width, half its interval, height in the figure

_WIDTH_INCHES = 9.6
_INCHES_A_LETTER = 0.078  # at 10 points

_MEASURED: dict[str, Any] = {"color": MEASURED, "marker": "o", "markerfacecolor": MEASURED}
_DECLARED: dict[str, Any] = {"color": MEASURED, "marker": "s", "markerfacecolor": PAPER}
_ACHIEVED: dict[str, Any] = {"color": ACHIEVED, "marker": "D", "markerfacecolor": ACHIEVED}


@dataclass(frozen=True)
class Mark:
    """One row of the widths' figure: widths and 95 % half intervals in mm, None where there is none."""

    label: str
    measured_mm: float | None
    measured_half_mm: float | None
    target_mm: float | None
    achieved_mm: float | None
    achieved_half_mm: float | None
    declared: bool = False


def widths_figure(in_plane: Sequence[Mark], axial: Sequence[Mark], *, name: str, title: str, text: str) -> str:
    """Measured, target and achieved widths: a row a period, one panel a direction.

    Parameters
    ----------
    in_plane, axial
        The periods' marks, in the same order.
    name
        Prefix of the ids in the figure: unique in the page.
    title, text
        What a screen reader says: the figure's name and its message.
    """
    rows = max(len(in_plane), 1)
    left = 0.3 + _INCHES_A_LETTER * max((len(mark.label) for mark in in_plane), default=0)
    with _drawing(left=left, right=0.1, top=0.35, bottom=0.95, inner_height=0.36 * rows) as figure:
        axes = figure.subplots(1, 2, sharex=True, sharey=True, gridspec_kw={"wspace": 0.05})
        for side, marks, heading in zip(axes, (in_plane, axial), ("In-plane", "Axial"), strict=True):
            _rows(side, marks)
            side.set_title(heading, loc="left", fontsize=11, fontweight="bold")
        axes[0].set_yticks(range(len(in_plane)), [mark.label for mark in in_plane])
        axes[0].set_ylim(rows - 0.5, -0.5)
        figure.legend(handles=_legend(), loc="lower center", ncols=4, fontsize=9.5)
        return _page_svg(figure, name=name, title=title, text=text)


def _rows(side: Axes, marks: Sequence[Mark]) -> None:
    for target in sorted({mark.target_mm for mark in marks if mark.target_mm is not None}):
        side.axvline(target, color=TARGET, linewidth=1.6, linestyle=(0, (5, 2)), zorder=1)
    measured: list[_Point] = []
    declared: list[_Point] = []
    achieved: list[_Point] = []
    for y, mark in enumerate(marks):
        if mark.measured_mm is not None:
            found = declared if mark.declared else measured
            found.append((mark.measured_mm, mark.measured_half_mm or 0.0, y - 0.14))
        if mark.achieved_mm is not None:
            achieved.append((mark.achieved_mm, mark.achieved_half_mm or 0.0, y + 0.14))
    # All of one look at once: a study of hundreds of periods stays quick.
    for points, look in ((measured, _MEASURED), (declared, _DECLARED), (achieved, _ACHIEVED)):
        if points:
            x, half, y_all = zip(*points, strict=True)
            low, high = ([value + sign * part for value, part in zip(x, half, strict=True)] for sign in (-1, 1))
            side.hlines(y_all, low, high, color=look["color"], linewidth=1.8, zorder=2)
            side.plot(x, y_all, markersize=6, linestyle="none", zorder=3, **look)
    side.set_xlabel("width (FWHM), mm")
    side.grid(axis="x")
    side.set_axisbelow(True)
    side.tick_params(length=0)
    for where in ("top", "right", "left"):
        side.spines[where].set_visible(False)
    side.margins(x=0.06)


def _legend() -> list[Line2D]:
    return [
        Line2D([], [], linewidth=1.8, label="measured, 95 % interval", **_MEASURED),
        Line2D([], [], linewidth=1.8, label="declared, 95 % interval", **_DECLARED),
        Line2D([], [], color=TARGET, linewidth=1.6, linestyle=(0, (5, 2)), label="target"),
        Line2D([], [], linewidth=1.8, label="achieved, resulting 95 % interval", **_ACHIEVED),
    ]


@contextmanager
def _drawing(*, left: float, right: float, top: float, bottom: float, inner_height: float) -> Iterator[Figure]:
    """A figure of fixed width whose margins and inner height are given in inches."""
    height = top + inner_height + bottom
    with mpl.rc_context():
        mpl.rcdefaults()  # a user's own matplotlib settings must not change the page
        mpl.rcParams.update(_STYLE)
        figure = Figure(figsize=(_WIDTH_INCHES, height))
        figure.subplots_adjust(
            left=min(left / _WIDTH_INCHES, 0.5),
            right=1 - right / _WIDTH_INCHES,
            top=1 - top / height,
            bottom=bottom / height,
        )
        yield figure


def _page_svg(figure: Figure, *, name: str, title: str, text: str) -> str:
    buffer = io.BytesIO()
    nothing = dict.fromkeys(("Date", "Creator", "Format", "Type"))
    figure.savefig(buffer, format="svg", transparent=True, metadata=nothing)
    return page_svg(buffer.getvalue().decode("utf-8"), name=name, title=title, text=text)


def page_svg(svg: str, *, name: str, title: str, text: str) -> str:
    """An SVG file as an element of the page: own ids, own words, the page's colours and font.

    >>> element = page_svg('<?xml?><svg width="9"><g id="a"/></svg>', name="f", title="T", text="D")
    >>> element.startswith('<svg role="img"'), element.endswith('<g id="f-a"/></svg>')
    (True, True)
    """
    body = svg[svg.index("<svg") :].strip()
    body = re.sub(r"<metadata>.*?</metadata>\s*", "", body, flags=re.DOTALL)
    opening, _, rest = body.partition(">")
    opening = re.sub(r'\s(width|height|version|xmlns(:\w+)?)="[^"]*"', "", opening)
    rest = re.sub(r'\bid="([^"]+)"', rf'id="{name}-\1"', rest)
    rest = re.sub(r"url\(#([^)]+)\)", rf"url(#{name}-\1)", rest)
    rest = re.sub(r'xlink:href="#([^"]+)"', rf'href="#{name}-\1"', rest)
    rest = re.sub(r"font: ([^;\"]*?)(\d[\d.]*px) [^;\"]*", r"font: \1\2 sans-serif", rest)
    for drawn, variable in COLOURS.items():
        rest = rest.replace(drawn, variable)
    words = f'<title id="{name}-title">{escape(title)}</title><desc id="{name}-desc">{escape(text)}</desc>'
    return f'{opening} role="img" aria-labelledby="{name}-title" aria-describedby="{name}-desc">{words}{rest}'
