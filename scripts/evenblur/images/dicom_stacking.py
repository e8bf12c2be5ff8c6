"""Put the slices of a DICOM series in order: by position in space, then by time. Numbers only, no files."""

from dataclasses import dataclass, field
from itertools import pairwise
from pathlib import Path
from typing import Any

import numpy as np

SAME_PLACE_MM = 0.01
"""Slices this near to each other show the same place at several times."""

OFF_GRID_MM = 0.1
"""A slice may lie this far from the even grid (headers round positions), or a tenth of the spacing if that is less."""

LARGEST_VOLUME_BYTES = 2 << 30
"""A 3-D volume that claims more than this, at 8 bytes a voxel, is refused before any memory is taken for it."""

TIME_KEYS = ("image_index", "reference_time", "temporal_position", "trigger_time", "acquired", "occurrence")
"""What can tell the time frames of a series apart, the most definite first."""

_SEND_WHOLE = "send the whole series again"


class SeriesError(Exception):
    """A series that cannot be used: what is wrong, what to do, and the hold reason.

    The words are ours alone: neither text of a header nor a file's name is ever among them.
    """

    def __init__(self, what: str, mend: str = _SEND_WHOLE, code: str = "image_unreadable") -> None:
        super().__init__(what)
        self.what = what
        self.mend = mend
        self.code = code


@dataclass(frozen=True)
class Slice:
    """One slice of a series.

    Attributes
    ----------
    file
        Where its pixels are.
    index
        Its number within a file of several; None if it is the file's only picture.
    rows, columns
        Size of the picture.
    position_mm
        Centre of the first pixel, DICOM's world (x to the left, y to the back, z to the head), mm.
    along_row, along_column
        Unit vectors of increasing column index and of increasing row index, same world.
    between_rows_mm, between_columns_mm
        Pixel spacing.
    slope, intercept
        Value = slope x stored number + intercept.
    times
        What tells its time frame, by the names in `TIME_KEYS`; values of one name compare with each other.
    duration_ms
        Duration of its time frame; None if unknown.
    """

    file: Path
    index: int | None
    rows: int
    columns: int
    position_mm: tuple[float, float, float]
    along_row: tuple[float, float, float]
    along_column: tuple[float, float, float]
    between_rows_mm: float
    between_columns_mm: float
    slope: float = 1.0
    intercept: float = 0.0
    times: dict[str, Any] = field(default_factory=dict)
    duration_ms: float | None = None


@dataclass(frozen=True)
class Stack:
    """Slices in order: for each time frame a tuple of slices by position, and the grid that they form.

    Attributes
    ----------
    frames
        Time frames, each with all slices, ascending along the slices' normal.
    affine
        4 x 4, from (column, row, slice) indices to mm in the world of NIfTI (x to the right, y to the front).
    """

    frames: tuple[tuple[Slice, ...], ...]
    affine: np.ndarray


def stack_slices(slices: list[Slice]) -> Stack:
    """Order slices into time frames of evenly spaced slices.

    Parameters
    ----------
    slices
        All slices of one series, in any order.

    Raises
    ------
    SeriesError
        If slices differ in size, spacing or direction, are missing, double, unevenly spaced or out of line, if nothing
        tells the time frames apart, or if the volume is too large.

    >>> flat = dict(rows=4, columns=5, along_row=(1, 0, 0), along_column=(0, 1, 0))
    >>> flat |= dict(between_rows_mm=2.0, between_columns_mm=3.0)
    >>> stack = stack_slices([Slice(Path(), None, position_mm=(0, 0, z), **flat) for z in (4.0, 0.0, 8.0)])
    >>> [part.position_mm[2] for part in stack.frames[0]], np.diag(stack.affine).tolist()
    ([0.0, 4.0, 8.0], [-3.0, -2.0, 4.0, 1.0])
    """
    _check_alike(slices)
    first = slices[0]
    normal = np.cross(first.along_row, first.along_column)
    heights = np.array([np.dot(part.position_mm, normal) for part in slices])
    order = np.argsort(heights, kind="stable")
    cuts = np.flatnonzero(np.diff(heights[order]) > SAME_PLACE_MM) + 1
    places = [[slices[index] for index in group] for group in np.split(order, cuts)]
    if len(places) < 2:
        raise SeriesError("holds one slice only, which is no volume", code="not_a_volume")
    if first.rows * first.columns * len(places) * 8 > LARGEST_VOLUME_BYTES:
        size = f"{first.columns}x{first.rows}x{len(places)}"
        raise SeriesError(f"claims a volume of {size} voxels, which is too large", "crop the images", "too_large")
    _check_counts(places)
    frames = _time_frames(places)
    return Stack(frames, _affine(frames))


def _check_alike(slices: list[Slice]) -> None:
    first = slices[0]
    for part in slices[1:]:
        if (part.rows, part.columns) != (first.rows, first.columns):
            raise SeriesError("its slices differ in rows or columns", "send one series whose slices are of one size")
        spacing = (part.between_rows_mm, part.between_columns_mm)
        if not np.allclose(spacing, (first.between_rows_mm, first.between_columns_mm), rtol=1e-4):
            raise SeriesError("its slices differ in pixel spacing", "send one series whose slices are of one size")
        # Headers keep direction cosines to a few digits: a thousandth is a twentieth of a degree.
        turned = np.abs(np.subtract((part.along_row, part.along_column), (first.along_row, first.along_column)))
        if np.max(turned) > 2e-3:
            raise SeriesError("its slices are turned against each other", "send one series of parallel slices")


def _check_counts(places: list[list[Slice]]) -> None:
    counts = [len(place) for place in places]
    usual = max(set(counts), key=counts.count)
    for number, count in enumerate(counts, start=1):
        if count != usual:
            where = f"slice {number} of {len(places)} (counted by position)"
            raise SeriesError(f"{where} is there {_times(count)}, most others {_times(usual)}")


def _times(count: int) -> str:
    return {1: "once", 2: "twice"}.get(count, f"{count} times")


def _time_frames(places: list[list[Slice]]) -> tuple[tuple[Slice, ...], ...]:
    if len(places[0]) == 1:
        return (tuple(place[0] for place in places),)
    for key in TIME_KEYS:
        frames = _frames_by(key, places)
        if frames is not None:
            return frames
    what = f"each slice is there {_times(len(places[0]))}, and no time tells the frames apart"
    raise SeriesError(what, "remove copies, or send each image in a folder of its own")


def _frames_by(key: str, places: list[list[Slice]]) -> tuple[tuple[Slice, ...], ...] | None:
    """Frames in the order of one kind of time; None unless it tells every frame from every other."""
    if any(key not in part.times for place in places for part in place):
        return None
    ranked = [sorted(place, key=lambda part: part.times[key]) for place in places]
    frames = tuple(zip(*ranked, strict=True))
    values: list[list[Any]] = [[part.times[key] for part in frame] for frame in frames]
    apart = all(max(earlier) < min(later) for earlier, later in pairwise(values))
    return frames if apart else None


def _affine(frames: tuple[tuple[Slice, ...], ...]) -> np.ndarray:
    first = frames[0][0]
    positions = np.array([[part.position_mm for part in frame] for frame in frames])
    count = positions.shape[1]
    step = (positions[0, -1] - positions[0, 0]) / (count - 1)
    normal = np.cross(first.along_row, first.along_column)
    _check_even(positions, step, normal)
    affine = np.eye(4)
    affine[:3, 0] = np.multiply(first.along_row, first.between_columns_mm)
    affine[:3, 1] = np.multiply(first.along_column, first.between_rows_mm)
    affine[:3, 2] = step
    affine[:3, 3] = positions[0, 0]
    # DICOM counts x to the left and y to the back, NIfTI to the right and to the front.
    affine[:2] *= -1.0
    return affine + 0.0  # no negative zeros


def _check_even(positions: np.ndarray, step: np.ndarray, normal: np.ndarray) -> None:
    count = positions.shape[1]
    even = positions[0, 0] + np.arange(count)[:, None] * step
    off = positions - even
    spacing = float(np.linalg.norm(step))
    allowed = min(OFF_GRID_MM, 0.1 * spacing)
    if np.max(np.linalg.norm(off, axis=-1)) <= allowed:
        return
    gaps = np.diff(positions[0] @ normal)
    usual = float(np.sort(gaps)[(count - 2) // 2])
    worst = int(np.argmax(np.abs(gaps - usual)))
    if np.max(np.abs(off[0] @ normal)) > allowed:
        places = f"slices {worst + 1} and {worst + 2} of {count} (counted by position)"
        raise SeriesError(f"the gap between {places} is {gaps[worst]:.2f} mm where {usual:.2f} mm is usual")
    number = int(np.argmax(np.max(np.linalg.norm(off, axis=-1), axis=0))) + 1
    what = f"slice {number} of {count} (counted by position) lies beside the line of the others"
    raise SeriesError(what, "send one series on one even grid")
