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


@dataclass(frozen=True)
class Panel:
    """One phantom before and after smoothing; each profile as `Measurement.fit["profile"]` (see phantoms/base.py)."""

    title: str
    subtitle: str
    before: dict[str, Any] | None
    after: dict[str, Any] | None


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


def profiles_figure(panels: Sequence[Panel], *, name: str, title: str, text: str) -> str:
    """Profiles of phantoms before and after smoothing: small panels, three a line.

    Each panel is scaled to the largest value before smoothing (after it, where there is no before).
    """
    lines = max(-(-len(panels) // 3), 1)
    gap = 1.0  # inches between two lines of panels: tick labels, axis label, the next title
    height = 1.5 * lines + gap * (lines - 1)
    with _drawing(left=0.45, right=0.1, top=0.5, bottom=0.95, inner_height=height) as figure:
        spaces = {"hspace": gap / 1.5, "wspace": 0.2}
        axes = figure.subplots(lines, 3, squeeze=False, gridspec_kw=spaces).ravel()
        for side, panel in zip(axes, panels, strict=False):
            _profile_panel(side, panel)
        for side in axes[len(panels) :]:
            side.set_axis_off()
        figure.legend(
            handles=[
                Line2D([], [], color=MEASURED, marker="o", markersize=4, label="before smoothing: data and fit"),
                Line2D([], [], color=ACHIEVED, marker="D", markersize=4, label="after smoothing: data and fit"),
            ],
            loc="lower center",
            ncols=2,
            fontsize=9.5,
        )
        return _page_svg(figure, name=name, title=title, text=text)


def _profile_panel(side: Axes, panel: Panel) -> None:
    shown = panel.before or panel.after or {}
    scale = max((abs(value) for value in shown.get("measured") or [] if value is not None), default=1.0) or 1.0
    for profile, colour, marker in ((panel.before, MEASURED, "o"), (panel.after, ACHIEVED, "D")):
        if profile is None:
            continue
        x = [float(value) for value in profile["position_mm"]]
        for key, style in (("measured", {"marker": marker, "linestyle": "none"}), ("fitted", {"linewidth": 1.4})):
            y = [float("nan") if value is None else value / scale for value in profile.get(key) or []]
            if len(y) == len(x):
                side.plot(x, y, color=colour, markersize=2.6, markeredgewidth=0, **style)
    side.set_title(f"{panel.title}\n{panel.subtitle}", loc="left", fontsize=9.5)
    side.set_xlabel("mm", fontsize=9)
    side.set_ylim(bottom=min(0.0, side.get_ylim()[0]))
    side.grid()
    side.locator_params(nbins=5)
    side.tick_params(length=0, labelsize=8.5)
    for where in ("top", "right"):
        side.spines[where].set_visible(False)


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
