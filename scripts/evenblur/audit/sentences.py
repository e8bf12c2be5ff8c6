"""The report's words: the verdict, the target, the settings, as finished sentences."""

from collections.abc import Mapping, Sequence
from typing import Any

from evenblur.audit.inputs import AuditInput
from evenblur.audit.periods import DIRECTIONS
from evenblur.audit.queries import WORDS
from evenblur.audit.tables import number

SYMBOLS = {"pass": "✓", "fail": "✕", "unproven": "?", "declared": "◇", "coarser": "▲", "unmeasured": "□"}
"""A sign beside each verdict's word, so that colour never speaks alone."""

MEANINGS = {
    "pass": "measured, smoothed, measured again at the target within the tolerance, and certain enough to say so",
    "fail": "the smoothed phantom misses the target by more than the tolerance",
    "unproven": "the phantom is at the target, but its statistical error is unknown or above half the tolerance",
    "declared": "a width was declared, not measured, so there is nothing to measure again",
    "coarser": "the images are coarser than the target, and smoothing cannot be undone: the scans are held",
    "unmeasured": "a width is known neither from a phantom nor from a declaration: the scans are held",
}
"""What each verdict says, for the page's readers."""


def shown_mm(value: float | None) -> str:
    """A width for reading, two decimals; a dash where there is none.

    >>> shown_mm(4.0), shown_mm(None)
    ('4.00', '–')
    """
    return "–" if value is None else f"{value:.2f}"


def _plural(count: int, word: str) -> str:
    return f"{count} {word}" if count == 1 else f"{count} {word}s"


def verdict_line(counts: Mapping[str, int], *, clean: bool) -> str:
    """The page's first sentence; `idle` are the passing periods that no scan belongs to.

    >>> verdict_line({"periods": 2, "passing": 1, "idle": 0, "accepted": 9, "held": 1}, clean=True)
    '1 of 2 periods passes; 9 scans are accepted, 1 is held; the harmonised data set is clean.'
    >>> verdict_line({"periods": 2, "passing": 2, "idle": 2, "accepted": 0, "held": 0}, clean=True)
    '2 of 2 periods pass; no scans yet.'
    """
    passing, idle = counts["passing"], counts["idle"]
    verb = "passes" if passing == 1 else "pass"
    first = f"{passing} of {_plural(counts['periods'], 'period')} {verb}" if counts["periods"] else "No periods yet"
    if not counts["accepted"] + counts["held"]:
        return f"{first}; no scans yet{'' if clean else '; the harmonised data set is not clean'}."
    first += f", {'one' if idle == 1 else idle} of them without scans" if idle else ""
    accepted = f"{_plural(counts['accepted'], 'scan')} {'is' if counts['accepted'] == 1 else 'are'} accepted"
    held = f"{counts['held']} {'is' if counts['held'] == 1 else 'are'} held"
    return f"{first}; {accepted}, {held}; the harmonised data set is {'clean' if clean else 'not clean'}."


def target_sentences(audit: AuditInput) -> list[str]:
    """How the target was decided, in sentences."""
    target, rule = audit.plan.get("target", {}), audit.settings.get("target") or {}
    widths = [f"{WORDS[name]} {number(target.get(f'{name}_mm'))} mm" for name in DIRECTIONS if target.get(f"{name}_mm")]
    if not widths:
        return ["No target could be decided: no period in use has a width that may set it."]
    both = target.get("in_plane_mm") == target.get("axial_mm")
    shown = f"{number(target.get('axial_mm'))} mm in both directions" if both else " and ".join(widths)
    sentences = [f"The common width (FWHM) is {shown}."]
    decided, on, reason = (spoken(target.get(key)) for key in ("decided_by", "on", "reason"))
    if target.get("choose") == "fixed":
        day = f" on {on}" if on else ""
        sentences.append(
            f"It was fixed by {decided or 'the study'}{day}{': ' + reason if reason else ''}".rstrip(".") + "."
        )
        return sentences
    same = "; the larger of both directions counts for both" if rule.get("isotropic") else ", each direction by itself"
    counts = "may" if rule.get("declared_counts") else "may not"
    sentences.append(
        f"It is set by the coarsest period in use: the largest measured width plus {number(rule.get('allowance_se'))} "
        f"standard errors{same}, rounded up to a multiple of {number(rule.get('round_up_to_mm'))} mm. "
        f"A declared width {counts} set it."
    )
    if decided:
        sentences.append(f"Set by {decided}.")
    if reason:
        sentences.append(reason if reason.endswith(".") else f"{reason}.")
    sentences.append(
        "Taking a maximum is a stated bias: the true result of the coarsest site is a little finer than the target."
    )
    return sentences


def spoken(value: Any) -> str:
    """A value of the records as words.

    >>> spoken({"in_plane": "A.s1", "axial": None}), spoken(2.0), spoken(["a", "b"])
    ('in-plane: A.s1; axial: ', '2', 'a, b')
    """
    if value is None:
        return ""
    if isinstance(value, Mapping):
        return "; ".join(f"{WORDS.get(str(key), str(key))}: {spoken(part)}" for key, part in value.items())
    if isinstance(value, Sequence) and not isinstance(value, str):
        return ", ".join(spoken(part) for part in value)
    return number(value) if isinstance(value, float) else str(value)


def flattened(settings: Mapping[str, Any], *, prefix: str = "") -> list[tuple[str, str]]:
    """Nested settings as (dotted key, text) pairs, in their order.

    >>> flattened({"target": {"choose": "fixed", "axial_mm": None}, "demo": True})
    [('target.choose', 'fixed'), ('target.axial_mm', 'not set'), ('demo', 'yes')]
    """
    pairs: list[tuple[str, str]] = []
    for key, value in settings.items():
        if isinstance(value, Mapping):
            pairs += flattened(value, prefix=f"{prefix}{key}.")
        elif isinstance(value, bool):
            pairs.append((f"{prefix}{key}", "yes" if value else "no"))
        else:
            pairs.append((f"{prefix}{key}", "not set" if value is None else spoken(value)))
    return pairs
