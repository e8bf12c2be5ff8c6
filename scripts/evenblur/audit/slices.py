"""Slices of fits as pictures in the page: the greys of a record become PNG images that stand inside it."""

import base64
import struct
import zlib
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

_SIGNATURE = b"\x89PNG\r\n\x1a\n"


@dataclass(frozen=True)
class Picture:
    """One picture: the word below it, its address (`data:`), and what a screen reader says."""

    word: str
    address: str
    told: str


@dataclass(frozen=True)
class Triple:
    """A slice measured, fitted and their difference; `aspect` is its width over its height as CSS writes it."""

    title: str
    subtitle: str
    label: str
    aspect: str
    pictures: tuple[Picture, Picture, Picture]
    scale: str


@dataclass(frozen=True)
class Couple:
    """A slice before and after smoothing on one scale; `aspect` is its width over its height as CSS writes it."""

    title: str
    subtitle: str
    label: str
    aspect: str
    pictures: tuple[Picture, Picture]
    scale: str


def grey_png(greys: bytes, *, width: int, height: int) -> bytes:
    """An 8-bit grey PNG (ISO/IEC 15948), rows from the top; the same greys give the same bytes.

    Raises
    ------
    ValueError
        If there are not `width` times `height` greys.

    Examples
    --------
    >>> grey_png(bytes([0, 255]), width=2, height=1)[1:4]
    b'PNG'
    """
    if len(greys) != width * height:
        raise ValueError(f"{len(greys)} greys do not fill {width} × {height} pixels")
    rows = np.frombuffer(greys, dtype=np.uint8).reshape(height, width)
    above = np.vstack([np.zeros((1, width), dtype=np.uint8), rows[:-1]])
    # Rows as they are (filter 0), or as the step from the row above (filter 2), which smooth pictures pack better in.
    packed = []
    for filter_type, values in ((0, rows), (2, rows - above)):
        lines = np.column_stack([np.full(height, filter_type, dtype=np.uint8), values])
        packed.append(zlib.compress(lines.tobytes(), 9))
    header = struct.pack(">IIBBBBB", width, height, 8, 0, 0, 0, 0)
    data = min(packed, key=len)
    return _SIGNATURE + _chunk(b"IHDR", header) + _chunk(b"IDAT", data) + _chunk(b"IEND", b"")


def _chunk(kind: bytes, data: bytes) -> bytes:
    return struct.pack(">I", len(data)) + kind + data + struct.pack(">I", zlib.crc32(kind + data))


def slice_triple(record: Mapping[str, Any], *, title: str, subtitle: str) -> Triple:
    """The three pictures of a slice, from a record's entry (see `phantoms/pictures.py`).

    Parameters
    ----------
    record
        An entry of `fit["slices"]`.
    title, subtitle
        The period, and the phantom with its kind.
    """
    width, height = int(record["width"]), int(record["height"])
    low, high, span = (_figure(record[key]) for key in ("low", "high", "difference_span"))
    share = 100.0 * record["difference_span"] / (record["high"] - record["low"])
    unit = str(record.get("unit") or "image unit")
    what = f"{record['label']} of {title}, {subtitle}"
    told = {
        "measured": f"{what}: as measured",
        "fitted": f"{what}: as fitted",
        "difference": f"{what}: measured minus fitted; grey is no difference",
    }
    pictures = [
        Picture(word, _address(record[word], width=width, height=height), f"{words}.") for word, words in told.items()
    ]
    return Triple(
        title=title,
        subtitle=subtitle,
        label=str(record["label"]),
        aspect=f"{record['width_mm']:g} / {record['height_mm']:g}",
        pictures=(pictures[0], pictures[1], pictures[2]),
        scale=f"Black {low} to white {high} ({unit}). Difference: black −{span}, white +{span}, which is {share:.0f} % "
        "of that range; mid-grey is none.",
    )


def slice_couple(record: Mapping[str, Any], *, title: str, subtitle: str) -> Couple:
    """The two pictures of a slice before and after smoothing (see `picture_pairs.py`).

    Parameters
    ----------
    record
        What `pair_record` made.
    title, subtitle
        Whose slice it is.
    """
    width, height = int(record["width"]), int(record["height"])
    what = f"{record['label']} of {title}" + (f", {subtitle}" if subtitle else "")
    pictures = [
        Picture(word, _address(record[word], width=width, height=height), f"{what}: {word} smoothing.")
        for word in ("before", "after")
    ]
    return Couple(
        title=title,
        subtitle=subtitle,
        label=str(record["label"]),
        aspect=f"{record['width_mm']:g} / {record['height_mm']:g}",
        pictures=(pictures[0], pictures[1]),
        scale=f"Black {_figure(record['low'])} to white {_figure(record['high'])} in both, "
        f"{record['width_mm']:.0f} mm across.",
    )


def _address(greys: str, *, width: int, height: int) -> str:
    png = grey_png(base64.b64decode(greys), width=width, height=height)
    return "data:image/png;base64," + base64.b64encode(png).decode("ascii")


def _figure(value: float) -> str:
    """Three significant digits, without a power of ten where the number is readable.

    >>> _figure(24018.3), _figure(-0.0123), _figure(0.0)
    ('24000', '−0.0123', '0')
    """
    text = f"{float(f'{value:.3g}'):.10g}" if 1e-4 <= abs(value) < 1e9 or value == 0 else f"{value:.3g}"
    return text.replace("-", "−")
