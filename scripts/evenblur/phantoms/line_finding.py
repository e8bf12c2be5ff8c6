"""Lines along the bed, found in an image without being told where: bright spots of each slice, linked across slices."""

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from evenblur.phantoms.base import MeasurementError
from evenblur.phantoms.point_fit import LARGEST_FWHM_MM

MOST_LINES = 30
END_MARGIN = 2.0
"""In-plane widths that are dropped before an end of a line inside the field: the model is an endless line."""
SHORTEST = 2.0
"""In-plane widths of a line that must be left when its ends are dropped."""
FEWEST_SLICES = 3
FLAT_TOP = 0.55
"""Area above 0.8 of the peak by that above half of it: ln 0.8 / ln 0.5 = 0.32 for a Gaussian, 1 for a sharp disc."""
_ENOUGH_FOR_TOP = 20
"""Voxels above half of the peak that tell a flat top."""
_GAP = 3
"""Slices without a spot that a track survives."""
_STEEPEST = 0.45
"""Largest slope that is followed (24 degrees; up to 15 are tested)."""


@dataclass(frozen=True)
class Line:
    """First values of one line: place (2,; mm) in its middle slice, slope (2,), and its slices.

    `first`, `last` are the slices that enter the fit; `seen_first`, `seen_last` those in which the line is seen at all.
    """

    centre_mm: NDArray[np.float64]
    slope: NDArray[np.float64]
    first: int
    last: int
    seen_first: int
    seen_last: int

    @property
    def ends_seen(self) -> int:
        """How many of its ends lie inside the field."""
        return int(self.first > self.seen_first) + int(self.last < self.seen_last)


@dataclass(frozen=True)
class Lines:
    """The lines, with the image's background, its noise after a slight smoothing, and the rough width (mm)."""

    lines: tuple[Line, ...]
    background: float
    noise: float
    threshold: float
    fwhm_mm: float


@dataclass
class _Track:
    slices: list[int] = field(default_factory=list)
    places: list[NDArray[np.float64]] = field(default_factory=list)

    def predict(self, k: int, step: float) -> NDArray[np.float64]:
        if len(self.slices) < 4:
            return self.places[-1]
        recent = np.array(self.slices[-10:], dtype=float)
        where = np.array(self.places[-10:])
        slope = np.polyfit(recent * step, where, 1)[0]
        slope *= min(1.0, _STEEPEST / max(float(np.hypot(*slope)), 1e-9))
        return np.asarray(where.mean(axis=0) + slope * step * (k - recent.mean()))


def find_lines(volume: NDArray[np.float64], *, voxel_mm: tuple[float, float, float]) -> Lines:
    """Find bright lines along the bed, each at least a fifth as bright as the typical one.

    Parameters
    ----------
    volume
        Image, shape (x, y, z), z axial.
    voxel_mm
        Voxel sizes, mm.

    Returns
    -------
    Lines

    Raises
    ------
    MeasurementError
        If nothing stands out, or what does is too large for a line, or does not go on along the bed.

    Examples
    --------
    >>> x = np.arange(24) * 2.0
    >>> spot = np.exp(-0.5 * (((x[:, None] - 21.0) / 2.5) ** 2 + ((x - 25.0) / 2.5) ** 2))
    >>> found = find_lines(np.repeat(spot[..., None], 12, axis=2), voxel_mm=(2.0, 2.0, 3.0))
    >>> [line.centre_mm.round(1).tolist() for line in found.lines], found.lines[0].last
    ([[21.0, 25.0]], 11)
    """
    if volume.shape[2] < FEWEST_SLICES:
        raise MeasurementError(f"the image has {volume.shape[2]} slices; a line needs at least {FEWEST_SLICES}")
    smooth = ndimage.gaussian_filter(volume, (0.7, 0.7, 1.0), mode="nearest")
    background = float(np.median(smooth))
    noise = 1.4826 * float(np.median(np.abs(smooth - background)))
    top = smooth.max(axis=(0, 1)) - background
    if float(top.max()) <= max(8.0 * noise, 1e-12 * abs(background)):
        raise MeasurementError("nothing in the image stands out of its background: no line source is seen")
    height = float(np.median(top[top > 0.3 * top.max()]))
    threshold = max(0.2 * height, 6.0 * noise)
    active = np.flatnonzero(top > threshold)
    fwhm = _rough_width(smooth - background, top, active, voxel_mm)
    tracks = _follow(smooth, background, threshold, fwhm, active, voxel_mm)
    lines = [line for track in tracks if (line := _line_of(track, volume.shape, fwhm, voxel_mm)) is not None]
    if not lines:
        raise MeasurementError("no bright spot goes on from slice to slice along the bed: this is no line source")
    if len(lines) > MOST_LINES:
        raise MeasurementError(f"{len(lines)} lines are seen: this is no image of a few line sources")
    lines.sort(key=lambda line: tuple(line.centre_mm))
    return Lines(tuple(lines), background, noise, background + threshold, fwhm)


def _rough_width(
    raised: NDArray[np.float64],
    top: NDArray[np.float64],
    active: NDArray[np.intp],
    voxel_mm: tuple[float, float, float],
) -> float:
    """Diameter (mm) of the spot above half of each slice's maximum: the median over up to 40 slices."""
    chosen = active[np.unique(np.linspace(0, active.size - 1, 40).astype(int))]
    widths, tops, crossing = [], [], 0
    for k in chosen:
        plane = raised[..., k]
        labels, _ = ndimage.label(plane > 0.5 * top[k])
        spot = labels == labels[np.unravel_index(int(np.argmax(plane)), plane.shape)]
        for axis in (0, 1):
            along = np.flatnonzero(spot.any(axis=1 - axis))
            if along[0] == 0 and along[-1] == plane.shape[axis] - 1:
                crossing += 1
                break
        area = np.count_nonzero(spot)
        widths.append(2.0 * np.sqrt(area * voxel_mm[0] * voxel_mm[1] / np.pi))
        if area >= _ENOUGH_FOR_TOP:
            tops.append(np.count_nonzero(spot & (plane > 0.8 * top[k])) / area)
    if crossing > 0.5 * chosen.size:
        raise MeasurementError("the bright object crosses the whole slice: it is no line along the bed")
    fwhm = float(np.median(widths))
    if fwhm > LARGEST_FWHM_MM:
        raise MeasurementError(f"the bright object is about {fwhm:.0f} mm across: it is no line source")
    if len(tops) > 0.5 * chosen.size and float(np.median(tops)) > FLAT_TOP:
        raise MeasurementError("the bright objects have flat tops: they are wider than their blur, no thin lines")
    return max(fwhm, 1.2 * max(voxel_mm[:2]))


def _follow(
    smooth: NDArray[np.float64],
    background: float,
    threshold: float,
    fwhm: float,
    active: NDArray[np.intp],
    voxel_mm: tuple[float, float, float],
) -> list[_Track]:
    """Spots of each slice, joined to tracks, and tracks that continue each other joined to one."""
    reach = [max(1, round(0.7 * fwhm / step)) for step in voxel_mm[:2]]
    highest = ndimage.maximum_filter(smooth, size=(2 * reach[0] + 1, 2 * reach[1] + 1, 1), mode="nearest")
    peaks = (smooth == highest) & (smooth > background + threshold)
    counts = np.count_nonzero(peaks, axis=(0, 1))[active]
    if float(np.median(counts)) > 2 * MOST_LINES:
        raise MeasurementError(f"{int(np.median(counts))} bright spots are seen in a slice: this is no line source")
    done: list[_Track] = []
    alive: list[_Track] = []
    for k in active:
        still = [track for track in alive if k - track.slices[-1] <= _GAP]
        done += [track for track in alive if k - track.slices[-1] > _GAP]
        spots: list[NDArray[np.float64]] = []
        for place in np.argwhere(peaks[..., k]):
            spot = _spot(smooth[..., k] - background, place, reach, voxel_mm)
            # Equal neighbours are one peak.
            if all(np.hypot(*(spot - other)) > 0.7 * fwhm for other in spots):
                spots.append(spot)
        pairs = sorted(
            (float(np.hypot(*(track.predict(int(k), voxel_mm[2]) - spot))), t, s)
            for t, track in enumerate(still)
            for s, spot in enumerate(spots)
        )
        taken: tuple[set[int], set[int]] = (set(), set())
        for distance, t, s in pairs:
            allowed = 0.5 * fwhm + _STEEPEST * voxel_mm[2] * (k - still[t].slices[-1])
            if distance > allowed or t in taken[0] or s in taken[1]:
                continue
            taken[0].add(t)
            taken[1].add(s)
            still[t].slices.append(int(k))
            still[t].places.append(spots[s])
        alive = still + [_Track([int(k)], [spot]) for s, spot in enumerate(spots) if s not in taken[1]]
    return _joined([t for t in done + alive if len(t.slices) >= FEWEST_SLICES], fwhm, voxel_mm[2])


def _spot(
    raised: NDArray[np.float64], place: NDArray[np.intp], reach: list[int], voxel_mm: tuple[float, float, float]
) -> NDArray[np.float64]:
    box = tuple(slice(max(0, p - r), p + r + 1) for p, r in zip(place, reach, strict=True))
    weight = np.maximum(raised[box] - 0.3 * raised[tuple(place)], 0.0)
    grid = np.indices(weight.shape)
    total = max(float(weight.sum()), 1e-300)
    return np.array([(box[a].start + float((grid[a] * weight).sum()) / total) * voxel_mm[a] for a in (0, 1)])


def _joined(tracks: list[_Track], fwhm: float, step: float) -> list[_Track]:
    """A line whose activity fades in between gives several tracks on one straight line: they are one."""
    tracks.sort(key=lambda track: (-len(track.slices), track.slices[0]))
    kept: list[_Track] = []
    for track in tracks:
        for longer in kept:
            if len(longer.slices) < 6 or set(longer.slices) & set(track.slices):
                continue
            line = np.polyfit(np.array(longer.slices) * step, np.array(longer.places), 1)
            apart = np.array(track.places) - (np.array(track.slices)[:, None] * step * line[0] + line[1])
            if float(np.hypot(*apart.T).mean()) < 0.6 * fwhm:
                longer.slices += track.slices
                longer.places += track.places
                break
        else:
            kept.append(track)
    return kept


def _line_of(track: _Track, shape: tuple[int, ...], fwhm: float, voxel_mm: tuple[float, float, float]) -> Line | None:
    """The straight line through a track, without its ends; None if too little is left."""
    order = np.argsort(track.slices)
    slices, places = np.array(track.slices)[order], np.array(track.places)[order]
    z = slices * voxel_mm[2]
    keep = np.ones(z.size, dtype=bool)
    line = np.polyfit(z, places, 1)
    for _ in range(3):
        apart = np.hypot(*(places - (z[:, None] * line[0] + line[1])).T)
        keep = apart < max(3.0 * float(np.median(apart)), 0.25 * fwhm)
        line = np.polyfit(z[keep], places[keep], 1)
    seen_first, seen_last = int(slices[0]), int(slices[-1])
    drop = int(np.ceil(END_MARGIN * fwhm / voxel_mm[2]))
    first = seen_first if seen_first == 0 else seen_first + drop
    last = seen_last if seen_last == shape[2] - 1 else seen_last - drop
    leaves = first == 0 and last == shape[2] - 1
    if last - first + 1 < FEWEST_SLICES or ((last - first) * voxel_mm[2] < SHORTEST * fwhm and not leaves):
        return None
    if float(np.hypot(*line[0])) > _STEEPEST + 0.05:
        return None
    middle = 0.5 * (first + last) * voxel_mm[2]
    return Line(line[0] * middle + line[1], line[0], first, last, seen_first, seen_last)
