"""What a look through a data set tells about one image."""

import datetime
import json
import re
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

EARLIEST_YEAR = 1925
"""Dates before this year are shifted on purpose, to hide the day (BIDS: "dates … before 1925")."""

_LONGEST_TEXT = 120


@dataclass(frozen=True)
class FoundImage:
    """One image of a data set, in the data set's own words; empty text is what the data set does not tell.

    Attributes
    ----------
    path
        The image: a file, or a folder with one series.
    source
        Number of the data set that it comes from, from 1.
    phantom
        Whether it is taken for a phantom.
    subject, session, run, tracer
        Its labels in the data set.
    site
        The site's name by the data set's tables.
    institution
        The institution's name in the image's header or sidecar; it leaves this object only as a hashed label, unless
        names are asked for.
    scanner, reconstruction
        The scanner's model, and the reconstruction as a reader would write it.
    method
        The reconstruction's facts, to be compared with those of other images.
    acquired
        The day, year-month-day.
    radionuclide, kind
        Radionuclide; kind of phantom where a sidecar says so.
    files
        The files of a series that shares its folder with others; none where `path` is the image.
    remarks
        What a reader of the tables should know, in our own words.
    """

    path: Path
    source: int
    phantom: bool
    subject: str
    session: str = ""
    run: str = ""
    tracer: str = ""
    site: str = ""
    institution: str = ""
    scanner: str = ""
    reconstruction: str = ""
    method: str = ""
    acquired: str = ""
    radionuclide: str = ""
    kind: str = ""
    files: tuple[Path, ...] = ()
    remarks: tuple[str, ...] = ()


@dataclass
class Look:
    """All that was found in the data sets: the images, what was left out and why, the study's title and modality."""

    images: list[FoundImage] = field(default_factory=list)
    left_out: list[str] = field(default_factory=list)
    title: str = ""
    modality: str = "pet"


def clean(value: Any) -> str:
    r"""Text for a table cell: one line, printable, of bounded length; empty for what is no text or number.

    >>> clean(" Invented\t3 "), clean(4.0), clean(["a"]), clean("n/a")
    ('Invented 3', '4', '', '')
    """
    if isinstance(value, bool) or not isinstance(value, str | int | float):
        return ""
    text = " ".join((f"{value:g}" if isinstance(value, float) else str(value)).split())
    # A quotation mark at the start of a cell would swallow the tabs behind it.
    text = "".join(sign for sign in text if sign.isprintable()).replace('"', "'")
    return "" if text.lower() == "n/a" else text[:_LONGEST_TEXT].strip()


def comparable(values: list[Any]) -> str:
    """Facts as text that is equal for equal facts: case, spaces and the way of writing a number do not count.

    >>> comparable(["OSEM 3D", [4, 5.0]]) == comparable(["osem  3d", [4.0, 5]])
    True
    """

    def plain(value: Any) -> Any:
        if isinstance(value, list):
            return [plain(part) for part in value]
        return clean(value).lower()

    return json.dumps([plain(value) for value in values])


def day_of(*values: Any) -> tuple[str, str]:
    """The day that the first usable value tells, and a remark where there is none.

    Parameters
    ----------
    values
        Dates or times as BIDS (`2026-03-31T10:00:00`) or DICOM (`20260331`) write them, the most trusted first.

    Returns
    -------
    tuple of str
        The day as year-month-day, or nothing; what is to be said about it.

    >>> day_of("", "2026-03-31T10:00:00")
    ('2026-03-31', '')
    >>> day_of("1899-01-02")
    ('', 'acquired: the date is shifted (before 1925), write the true day')
    """
    shifted = False
    for value in values:
        written = re.match(r"(\d{4})[-:]?(\d{2})[-:]?(\d{2})(?!\d)|(\d{4})(\d{2})(\d{2})\d*", clean(value))
        if written is None:
            continue
        year, month, day = (int(part) for part in written.groups() if part is not None)
        try:
            found = datetime.date(year, month, day)
        except ValueError:
            continue
        if found.year >= EARLIEST_YEAR:
            return found.isoformat(), ""
        shifted = True
    if shifted:
        return "", f"acquired: the date is shifted (before {EARLIEST_YEAR}), write the true day"
    return "", "acquired: the day is not told, write it"
