"""Open a folder that holds one DICOM series as an image.

Messages about a folder are in our own words throughout: they hold no text of a header and no name of a file in it.
"""

import logging
import os
import warnings
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from itertools import groupby
from pathlib import Path
from typing import Any

import numpy as np
from pydicom.errors import InvalidDicomError
from pydicom.pixels import iter_pixels, pixel_array

from evenblur.errors import InputError
from evenblur.images.containers import FREE_FRAME_BYTES
from evenblur.images.dicom_headers import TIGHTEST_PICTURES, header_facts, read_header, slices_of
from evenblur.images.dicom_stacking import SeriesError, Slice, Stack, stack_slices
from evenblur.images.identity import filled_fields

IGNORED_NAMES = ("DICOMDIR", "LOCKFILE", "THUMBS.DB", "DESKTOP.INI")
"""Files that lie beside a series and are not part of it, as are hidden ones and those whose name begins with README."""

# DICOM's words for units and the units that they stand for.
_UNITS = {"BQML": "Bq/mL", "GML": "g/mL", "CNTS": "counts", "CPS": "counts/s"}
_DECAY_CORRECTED = {"START": True, "ADMIN": True, "NONE": False}
_SIDECAR_NAMES = {
    "ReconstructionMethod": "ReconMethodName",
    "ConvolutionKernel": "ReconFilterType",
    "AttenuationCorrectionMethod": "AttenuationCorrection",
    "ScatterCorrectionMethod": "ScatterCorrectionMethod",
    "RandomsCorrectionMethod": "RandomsCorrectionMethod",
}


@dataclass(frozen=True)
class DicomSeries:
    """A series whose slices are in order; its pixels are read frame by frame.

    Attributes
    ----------
    name
        The folder as the user's table has it, for messages.
    stack
        The slices in order and their affine.
    facts
        What its headers say and records may hold (`ALLOWED_FIELDS`), where all slices agree.
    patient_fields
        Names of the fields about the patient that any of its headers fills.
    """

    name: str
    stack: Stack
    facts: dict[str, Any]
    patient_fields: frozenset[str] = frozenset()

    @property
    def affine(self) -> np.ndarray:
        """4 x 4, voxel indices (column, row, slice) to mm, x to the right, y to the front, z to the head."""
        return self.stack.affine

    @property
    def shape(self) -> tuple[int, ...]:
        """Columns, rows, slices, and time frames where there are several."""
        first, frames = self.stack.frames[0], len(self.stack.frames)
        space = (first[0].columns, first[0].rows, len(first))
        return (*space, frames) if frames > 1 else space

    @property
    def sidecar_fields(self) -> dict[str, Any]:
        """What the headers say, by the names of BIDS."""
        facts = self.facts
        fields: dict[str, Any] = {"Units": _UNITS.get(facts.get("Units", ""))}
        fields["ImageDecayCorrected"] = _DECAY_CORRECTED.get(facts.get("DecayCorrection", ""))
        durations = [{part.duration_ms for part in frame} for frame in self.stack.frames]
        if all(len(found) == 1 and None not in found for found in durations):
            fields["FrameDuration"] = [(found.pop() or 0.0) / 1000.0 for found in durations]
        fields |= {ours: facts.get(theirs) for theirs, ours in _SIDECAR_NAMES.items()}
        return {key: value for key, value in fields.items() if value is not None}

    def read_frame(self, index: int) -> np.ndarray:
        """Time frame `index`, float64 (columns, rows, slices), each slice scaled by its own slope and intercept.

        Raises
        ------
        InputError
            With code `image_unreadable` if pixels are missing or damaged.
        """
        slices = self.stack.frames[index]
        volume = np.empty(self.shape[:3], order="F")
        number = 0
        try:
            with silence():
                for file, parts in groupby(slices, key=lambda part: part.file):
                    for part, pixels in _pixels(file, list(parts)):
                        if pixels.shape != (part.rows, part.columns):
                            raise ValueError("the picture is not of the size that its header says")
                        volume[:, :, number] = pixels.T
                        volume[:, :, number] *= part.slope
                        volume[:, :, number] += part.intercept
                        number += 1
        except Exception:  # decoders raise many kinds of error on damaged data, with the header in their text
            what = f"the pixels of slice {number + 1} of {len(slices)} (counted by position) cannot be read"
            raise InputError(self.name, what, "send the series again", "image_unreadable") from None
        return volume


@contextmanager
def silence() -> Iterator[None]:
    """Keep the DICOM reader's warnings to itself: they quote the header."""
    logger = logging.getLogger("pydicom")
    before = logger.disabled
    logger.disabled = True
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            yield
    finally:
        logger.disabled = before


def _pixels(file: Path, parts: list[Slice]) -> Any:
    if parts[0].index is None:
        return [(parts[0], pixel_array(file, raw=True))]
    return zip(parts, iter_pixels(file, indices=[part.index or 0 for part in parts], raw=True), strict=True)


def open_series(folder: Path, *, name: str | None = None) -> DicomSeries:
    """Read the headers of a folder with one DICOM series, of files with one slice or of multi-frame files.

    Parameters
    ----------
    folder
        The folder; files below it count as well.
    name
        How messages call it; the path itself by default.

    Raises
    ------
    InputError
        With code `image_unreadable`, `not_a_volume` or `too_large`, if the folder holds anything but one series whose
        slices form one even grid.
    """
    name = name or str(folder)
    try:
        with silence():
            slices, facts, patient_fields = _read_headers(_series_files(folder))
            stack = stack_slices(slices)
            _check_packing(stack)
            return DicomSeries(name, stack, facts, patient_fields)
    except SeriesError as error:
        # Without its cause: what the reader has to say quotes the header.
        raise InputError(name, error.what, error.mend, error.code) from None


def _check_packing(stack: Stack) -> None:
    """Refuse a series of many small pictures that unpacks to far more than pictures do."""
    first, pictures = stack.frames[0][0], sum(map(len, stack.frames))
    files = {part.file for frame in stack.frames for part in frame}
    pixels = first.rows * first.columns
    free = pixels * len(stack.frames[0]) * 8 <= FREE_FRAME_BYTES
    if not free and pixels * pictures > TIGHTEST_PICTURES * sum(file.stat().st_size for file in files):
        raise SeriesError("claims more pixels than its size can hold", "crop the images", "too_large")


def _series_files(folder: Path) -> list[Path]:
    files = []
    for place, folders, names in os.walk(folder):
        folders[:] = [below for below in folders if not below.startswith(".")]
        files += [Path(place, file) for file in names if not _ignored(file) and Path(place, file).is_file()]
    if not files:
        raise SeriesError("holds no DICOM file", "put the files of one series into it")
    return sorted(files)


def _ignored(file: str) -> bool:
    return file.startswith(".") or file.upper() in IGNORED_NAMES or file.upper().startswith("README")


def _read_headers(files: list[Path]) -> tuple[list[Slice], dict[str, Any], frozenset[str]]:
    slices: list[Slice] = []
    patient_fields: frozenset[str] = frozenset()
    facts: dict[str, Any] = {}
    series: set[str] = set()
    instances: dict[str, int] = {}
    for number, file in enumerate(files, start=1):
        where = f"file {number} of {len(files)} (counted by name)"
        try:
            header = read_header(file)
            series.add(str(header.get("SeriesInstanceUID") or ""))
            if len(series) > 1:
                break
            slices += slices_of(header, file)
            found = header_facts(header)
            patient_fields |= filled_fields(header)
            instance = str(header.get("SOPInstanceUID") or file)
        except SeriesError as error:
            raise SeriesError(f"{where} {error.what}", error.mend, error.code) from None
        except InvalidDicomError:
            raise SeriesError(f"{where} is not DICOM", "keep only the files of one series in the folder") from None
        except Exception:  # damaged headers raise many kinds of error, deep nesting among them
            raise SeriesError(f"{where} has a header that cannot be read") from None
        if instance in instances:
            what = f"files {instances[instance]} and {number} of {len(files)} (counted by name) are the same slice"
            raise SeriesError(what, "remove the copies")
        instances[instance] = number
        # Only what all slices agree on is a fact about the series.
        facts = found if number == 1 else {key: value for key, value in facts.items() if found.get(key) == value}
    if len(series) > 1:
        raise SeriesError("holds more than one series", "put each series into a folder of its own")
    return slices, facts, patient_fields
