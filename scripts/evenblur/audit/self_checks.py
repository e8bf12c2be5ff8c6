"""How each measurement checks itself: what the fits' records say beyond the widths, as rows and sentences."""

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

from evenblur.audit.inputs import AuditInput, Row
from evenblur.audit.periods import DIRECTIONS, flag_texts
from evenblur.audit.queries import WORDS
from evenblur.codes import FLAGS, meaning

GAUSSIAN_TENTH_TO_HALF = math.sqrt(math.log2(10.0))
"""Full width at tenth over full width at half maximum of any Gaussian: 1.8226."""

AGREE_WITHIN = 2.0
"""Standard errors that two halves may differ by and be said to agree: noise alone does so 19 times in 20."""

NEAR_GAUSSIAN = 0.05
"""How far the ratio of tenth to half width may lie from a Gaussian's and be called one (excess kurtosis of 0.2)."""


@dataclass(frozen=True)
class Halves:
    """Widths of two halves of the data, mm; the difference is first minus second."""

    first_mm: float
    second_mm: float
    difference_mm: float
    se_mm: float | None

    @property
    def words(self) -> str:
        """Whether the halves agree.

        >>> Halves(6.0, 6.1, -0.1, 0.06).words, Halves(6.0, 6.3, -0.3, 0.1).words, Halves(6.0, 6.3, -0.3, None).words
        ('agree', '3.0 errors apart', 'error unknown')
        """
        if self.se_mm is None:
            return "error unknown"
        if abs(self.difference_mm) <= AGREE_WITHIN * self.se_mm:
            return "agree"
        return f"{abs(self.difference_mm) / self.se_mm:.1f} errors apart" if self.se_mm > 0 else "no error to compare"


@dataclass(frozen=True)
class DirectionCheck:
    """One direction of one phantom: its width and the width of each half."""

    word: str
    width: Row | None
    halves: Halves | None


@dataclass(frozen=True)
class SelfCheck:
    """One phantom's row group. `figures` maps a column's key to (figure, words below it)."""

    phantom: str
    period: str
    kind: str
    directions: tuple[DirectionCheck, ...]
    figures: Mapping[str, tuple[str, str]]
    holds: tuple[str, ...]
    flags: tuple[tuple[str, str, str, str], ...]


COLUMNS = {
    "tenth_to_half": "Tenth<br>to half",
    "roundness": "In-plane<br>difference",
    "overshoot": "Edge<br>overshoot",
    "structure": "Structure<br>left",
}
"""Columns that speak of a phantom as a whole: key and heading, in their order."""

EXPLANATIONS = {
    "halves": (
        "Two halves",
        "the width from either half of the data (alternate blocks), and first minus second ± its standard error. They "
        f"agree up to {AGREE_WITHIN:g} errors; noise alone goes beyond that once in twenty.",
    ),
    "tenth_to_half": (
        "Tenth to half",
        "full width at a tenth of the maximum over full width at half of it, from the blur’s fitted shape. Any "
        f"Gaussian has {GAUSSIAN_TENTH_TO_HALF:.2f}; more means longer tails, less means shorter ones.",
    ),
    "roundness": (
        "In-plane difference",
        "how much the width differs between two in-plane directions at right angles (sources and lines: x minus y), "
        "and as a share of it.",
    ),
    "overshoot": (
        "Edge overshoot",
        "how far the image rises above the fit just inside an edge, as a share of the edge’s step; reconstruction with "
        "a point-spread model does that.",
    ),
    "structure": (
        "Structure left",
        "what the fit misses alike all round, not as noise: root mean square across the edge as a share of its step; "
        "for a digital reference, the share of the smoothed image’s variance that it leaves unexplained.",
    ),
}
"""What each column says."""


def self_checks(audit: AuditInput) -> list[SelfCheck]:
    """Every measured phantom's checks, in the order of the table of phantoms."""
    checks = []
    for row in audit.phantoms:
        record = audit.resolution.get(str(row["phantom"]))
        if record is not None:
            checks.append(_check(str(row["phantom"]), record))
    return checks


def columns_of(checks: list[SelfCheck]) -> dict[str, str]:
    """The columns that any phantom fills: key and heading."""
    return {key: heading for key, heading in COLUMNS.items() if any(key in check.figures for check in checks)}


def explanations_of(checks: list[SelfCheck]) -> list[tuple[str, str]]:
    """What the shown columns say: name and sentence."""
    shown = ["halves"] if any(d.halves for check in checks for d in check.directions) else []
    return [EXPLANATIONS[key] for key in [*shown, *columns_of(checks)]]


def _check(phantom: str, record: Row) -> SelfCheck:
    fit, kind = record.get("fit") or {}, str(record.get("kind") or "")
    directions = [
        DirectionCheck(WORDS[name], record.get(name), halves_of(fit.get("halves"), name))
        for name in DIRECTIONS
        if record.get(name) is not None
    ]
    flags = [
        (code, text or meaning(code), FLAGS[code].mend.replace("`", ""), FLAGS[code].who)
        if code in FLAGS
        else (code, text or meaning(code), "look into it", "data manager")
        for code, text in flag_texts(record.get("flags")).items()
    ]
    return SelfCheck(
        phantom=phantom,
        period=f"{record.get('setup')} · {record.get('phantom_session')}",
        kind=kind.replace("_", " "),
        directions=tuple(directions),
        figures=_figures(fit, record.get("in_plane") or {}),
        holds=tuple(_HOLDS[kind](fit)) if kind in _HOLDS and directions else (),
        flags=tuple(flags),
    )


def halves_of(halves: Any, direction: str) -> Halves | None:
    """Two halves of one direction from a fit's record, whichever kind of phantom wrote it.

    >>> halves_of({"in_plane_mm": [6.0, 6.2], "in_plane_difference_se_mm": 0.1}, "in_plane").words
    '2.0 errors apart'
    """
    if not isinstance(halves, Mapping):
        return None
    pair = halves.get(f"{direction}_mm")
    if pair is not None:
        first, second, se = pair[0], pair[1], halves.get(f"{direction}_difference_se_mm")
    else:
        own = halves.get(direction) or {}
        first = own.get("first_mm", own.get("first_fwhm_mm"))
        second = own.get("second_mm", own.get("second_fwhm_mm"))
        se = own.get("se_mm", own.get("difference_se_mm"))
    return None if first is None or second is None else Halves(first, second, first - second, se)


def _figures(fit: Row, in_plane: Row) -> dict[str, tuple[str, str]]:
    found: dict[str, tuple[str, str]] = {}
    ratio = fit.get("tenth_to_half")
    if ratio is not None:
        found["tenth_to_half"] = (f"{ratio:.2f}", _shape_words(ratio))
    difference = fit.get("in_plane_not_round_mm", fit.get("x_minus_y_mm"))
    if difference is not None:
        width = in_plane.get("fwhm_mm")
        share = f"{100 * abs(difference) / width:.1f} % of it" if width else ""
        found["roundness"] = (_mm(difference), share)
    overshoot = fit.get("edge_overshoot", fit.get("overshoot_share"))
    if overshoot is not None:
        found["overshoot"] = (f"{100 * overshoot:z.1f} %".replace("-", "−"), "of the step")
    for key, words in (
        ("structured_residual", "of the step"),
        ("edge_misfit_share", "of the step"),
        ("unexplained_share_smoothed", "of the variance"),
    ):
        if fit.get(key) is not None:
            found["structure"] = (f"{100 * fit[key]:.2f} %", words)
    return found


def _shape_words(ratio: float) -> str:
    if abs(ratio - GAUSSIAN_TENTH_TO_HALF) <= NEAR_GAUSSIAN:
        return "as a Gaussian"
    return "longer tails" if ratio > GAUSSIAN_TENTH_TO_HALF else "shorter tails"


def shown_difference(value: float) -> str:
    """A difference in mm for reading: a real minus sign, and none before nothing.

    >>> shown_difference(-0.251), shown_difference(-0.001), shown_difference(0.3)
    ('−0.25', '0.00', '0.30')
    """
    return f"{value:z.2f}".replace("-", "−")


def shown_error(value: float) -> str:
    """A standard error in mm for reading; one that would read as none says what it is below.

    >>> shown_error(0.0312), shown_error(0.0004)
    ('0.03', '< 0.01')
    """
    return f"{value:.2f}" if value >= 0.005 else "< 0.01"


def _mm(value: float) -> str:
    return f"{shown_difference(value)} mm"


def _change(value: float) -> str:
    return f"{'+' if value >= 0.005 else ''}{_mm(value)}"


def _with_error(value: float, se: float | None) -> str:
    return _mm(value) if se is None else f"{value:.2f} ± {shown_error(se)} mm"


def _cylinder_holds(fit: Row) -> list[str]:
    if "radius_mm" not in fit:
        return []
    words = f"In-plane at the wall, {fit['radius_mm']:.1f} mm from the cylinder’s axis"
    change = fit.get("width_varies_mm")
    sentences = [words + (f"; {_change(change)} from its lower to its upper end." if change is not None else ".")]
    seen = {0: "No end lies", 1: "One end lies", 2: "Both ends lie"}[int(fit.get("ends_seen") or 0)]
    tilt = " The axial width is from the tilt." if fit.get("axial_from") == "tilt" else ""
    ends = fit.get("axial_width_varies_mm")
    apart = f"; their axial widths differ by {_mm(abs(ends))}" if ends is not None else ""
    sentences.append(f"{seen} well inside the field{apart}.{tilt}")
    return sentences


def _line_holds(fit: Row) -> list[str]:
    lines = fit.get("width_by_radius") or []
    if not lines:
        return []
    parts = [f"{_with_error(line['in_plane_mm'], line.get('se_mm'))} at {line['radius_mm']:.0f} mm" for line in lines]
    return [f"Each line’s own width by its distance from the middle of the image: {'; '.join(parts)}."]


def _point_holds(fit: Row) -> list[str]:
    centres = [source["centre_mm"] for source in fit.get("sources") or []]
    if not centres:
        return []
    if len(centres) == 1:
        return ["At one source: the image tells nothing of the width elsewhere."]
    spans = " × ".join(f"{max(axis) - min(axis):.0f}" for axis in zip(*centres, strict=True))
    own = fit.get("source_in_plane_offset_mm")
    spread = f"; their own in-plane widths span {_mm(max(own) - min(own))}" if own else ""
    return [f"Over {len(centres)} sources in {spans} mm (x, y, bed){spread}."]


def _sphere_holds(fit: Row) -> list[str]:
    centres = [sphere["centre_mm"] for sphere in fit.get("spheres") or []]
    sentences = []
    if centres:
        spans = " × ".join(f"{max(axis) - min(axis):.0f}" for axis in zip(*centres, strict=True))
        noun = "sphere" if len(centres) == 1 else "spheres"
        sentences.append(f"At the edges of {len(centres)} {noun}, their centres within {spans} mm (x, y, bed).")
    own = []
    for row in fit.get("own_widths") or []:
        widths = " and ".join(
            f"{_with_error(row[f'{name}_fwhm_mm'], row.get(f'{name}_se_mm'))} {WORDS[name]}"
            for name in DIRECTIONS
            if row.get(f"{name}_fwhm_mm") is not None
        )
        own.append(f"{row['diameter_mm']:g} mm sphere {widths}")
    return [*sentences, f"Own widths: {'; '.join(own)}."] if own else sentences


def _reference_holds(fit: Row) -> list[str]:
    edges = " and ".join(
        f"{area / 100:.0f} cm² {name}" for name, area in (fit.get("edge_mm2") or {}).items() if area is not None
    )
    sentences = [f"Throughout the object, from edges worth {edges} at full contrast."] if edges else []
    parts = [f"{where} {_change(value)}" for where, value in (fit.get("width_differences_mm") or {}).items()]
    return [*sentences, f"Between parts of it: {'; '.join(parts)}."] if parts else sentences


_HOLDS: dict[str, Callable[[Row], list[str]]] = {
    "uniform_cylinder": _cylinder_holds,
    "line_source": _line_holds,
    "point_source": _point_holds,
    "hot_spheres": _sphere_holds,
    "reference_image": _reference_holds,
}


def recoveries(audit: AuditInput) -> dict[str, Any] | None:
    """Recovery coefficients of hot spheres: groups of rows and the readings' definitions; None where there are none."""
    groups: list[dict[str, Any]] = []
    definitions: dict[str, Any] = {}
    for row in audit.phantoms:
        record = audit.resolution.get(str(row["phantom"])) or {}
        fit = record.get("fit") or {}
        if fit.get("recovery"):
            period = f"{record.get('setup')} · {record.get('phantom_session')}"
            groups.append({"phantom": str(row["phantom"]), "period": period, "spheres": fit["recovery"]})
            definitions = dict(fit.get("recovery_definitions") or definitions)
    if not groups:
        return None
    relative_to = str(definitions.pop("relative_to", "the true level"))
    words = [(key.replace("_", " "), str(text)) for key, text in definitions.items()]
    return {"groups": groups, "definitions": words, "relative_to": relative_to}
