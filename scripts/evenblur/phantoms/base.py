"""What every phantom kind returns, and the errors that they share."""

from dataclasses import dataclass, field
from typing import Any


@dataclass(frozen=True)
class Width:
    """One measured width: `fwhm_mm`, its statistical standard error `se_mm` and the degrees of freedom `df`.

    `se_mm` and `df` are None where there were too few independent blocks to tell.
    """

    fwhm_mm: float
    se_mm: float | None
    df: float | None


@dataclass(frozen=True)
class Flag:
    """Something that a reader should know: a code of `evenblur.codes.FLAGS`, a sentence, and the figure behind it."""

    code: str
    text: str
    value: float | None = None


@dataclass(frozen=True)
class Measurement:
    """Widths of one phantom image.

    `fit` holds whatever else describes the fit, as plain JSON values (numbers, strings, lists, dicts). Each key with
    a unit says it (`radius_mm`). `fit["profile"]`, where there is one, is for the report's figure: lists `position_mm`,
    `measured`, `fitted`, all of one length (at most 200 points), with `label` and `unit` strings. `fit["slices"]`,
    where there are any, holds at most two slices (measured, fitted, difference) as `phantoms/pictures.py` makes them.
    """

    in_plane: Width | None
    axial: Width | None
    flags: tuple[Flag, ...] = ()
    fit: dict[str, Any] = field(default_factory=dict)


class MeasurementError(ValueError):
    """The image does not show the object that its kind promises: no width can be had from it.

    The message says what was wrong, in the trade's words, without a file name (the caller knows that).
    """
