"""Phantoms of one kind at several sites, point by point: how far they differ before and after their kernels."""

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from evenblur.achieving import LoadedPhantom, ProvingPhantom, load_phantom
from evenblur.measuring import PhantomVolume, plain
from evenblur.phantoms.reference_model import ReferenceModel
from evenblur.site_effect.common_grid import (
    CommonObject,
    NotComparableError,
    common_cylinder,
    common_reference,
    common_spheres,
    place_cylinder,
    place_reference,
    place_spheres,
    sample,
)
from evenblur.smoothing import smooth_volume

Array = NDArray[np.float64]
Record = Mapping[str, Any]

LEAST_LEVEL = 0.1
"""Points whose mean over the sites is below this share of the full activity are left out: relative differences of
almost nothing say nothing."""

SIZE_SPREAD = 0.15
"""Cylinders whose radius differs by more than this share from the usual one are not the same object."""

DEPTH_STEP_MM = 2.0

COMPARED = ("uniform_cylinder", "hot_spheres", "reference_image")
"""Kinds with an object to compare; the image of a source is nothing but its width."""


@dataclass(frozen=True)
class SitePhantom:
    """One period's phantom, as the comparison needs it.

    Attributes
    ----------
    phantom
        The phantom's image, kind and details.
    site, period
        Where it was scanned, and in which period.
    kernel
        The period's kernel, in-plane and axial, mm.
    fit
        The fit of its resolution record.
    """

    phantom: ProvingPhantom
    site: str
    period: str
    kernel: tuple[float, float]
    fit: Record


@dataclass(frozen=True)
class _Comparison:
    """How the phantoms of a group are laid on each other."""

    words: str
    common: CommonObject
    place: Callable[[LoadedPhantom, Record], Array]
    level: Callable[[Record], tuple[float, float]]


def compare_phantoms(
    phantoms: Sequence[SitePhantom], *, target_mm: float, study_dir: Path = Path()
) -> list[dict[str, Any]]:
    """Compare all phantoms of a study that show the same object.

    Parameters
    ----------
    phantoms
        The phantoms behind the periods that are harmonised, one a kind and period.
    target_mm
        The wider of the two target widths, mm: how far around the object points are taken.
    study_dir
        The folder that image paths are relative to.

    Returns
    -------
    list of dict
        One entry a group of the same object, or with `why` where a group cannot be compared.

    Raises
    ------
    InputError
        If an image cannot be read or changed since the run planned with it.
    """
    groups: dict[tuple[str, str], list[SitePhantom]] = {}
    for phantom in phantoms:
        groups.setdefault((phantom.phantom.kind, _object_key(phantom)), []).append(phantom)
    return [_compare_group(kind, members, target_mm, study_dir) for (kind, _), members in sorted(groups.items())]


def _object_key(phantom: SitePhantom) -> str:
    if phantom.phantom.kind == "reference_image":
        return str(phantom.phantom.reference_sha256)
    if phantom.phantom.kind == "hot_spheres":
        details = phantom.phantom.details
        diameters = sorted(float(diameter) for diameter in details["diameters_mm"])
        return f"{diameters} {float(details.get('wall_mm') or 1.0):g}"
    return ""


def _compare_group(kind: str, members: list[SitePhantom], target_mm: float, study_dir: Path) -> dict[str, Any]:
    entry: dict[str, Any] = {"kind": kind, "object": "", "phantoms": [], "sites": 0, "periods": 0, "points": 0}
    entry |= {"between_sites": None, "between_periods": None, "by_depth": [], "profile": None, "left_out": []}
    if kind not in COMPARED:
        words = kind.replace("_", " ")
        return {**entry, "why": f"the image of a {words} shows its width and no object to compare point by point"}
    kept, left_out = _same_size(members) if kind == "uniform_cylinder" else (members, [])
    entry["left_out"] = left_out
    if len({member.site for member in kept}) < 2:
        return {**entry, "why": "only one site scanned this object"}
    comparison = _prepare(kind, kept, target_mm, study_dir)
    before, after = _Sums(len(comparison.common.points)), _Sums(len(comparison.common.points))
    used = []
    for member in kept:
        try:
            pair = _sampled(member, comparison, study_dir)
        except NotComparableError as error:
            left_out.append({"phantom": member.phantom.label, "why": str(error)})
            continue
        used.append(member)
        before.add(member.site, pair[0])
        after.add(member.site, pair[1])
    entry |= {
        "object": comparison.words,
        "phantoms": [member.phantom.label for member in used],
        "sites": len({member.site for member in used}),
        "periods": len(used),
    }
    if entry["sites"] < 2:
        return {**entry, "why": "fewer than two sites have an image of it that can be compared"}
    entry |= _figures(before, after, comparison.common)
    return {**plain(entry), "why": None}


def _same_size(members: list[SitePhantom]) -> tuple[list[SitePhantom], list[dict[str, str]]]:
    radii = np.array([float(member.fit["radius_mm"]) for member in members])
    usual = float(np.median(radii))
    kept, left_out = [], []
    for member, radius in zip(members, radii, strict=True):
        if abs(radius - usual) <= SIZE_SPREAD * usual:
            kept.append(member)
        else:
            why = f"its radius of {radius:.1f} mm is not near the usual {usual:.1f} mm"
            left_out.append({"phantom": member.phantom.label, "why": why})
    return kept, left_out


def _prepare(kind: str, members: list[SitePhantom], target_mm: float, study_dir: Path) -> _Comparison:
    if kind == "uniform_cylinder":
        return _prepare_cylinder(members, target_mm)
    if kind == "hot_spheres":
        found = [{round(float(s["diameter_mm"]), 3) for s in member.fit["spheres"]} for member in members]
        diameters = sorted(set.intersection(*found), reverse=True)
        common, owner = common_spheres(diameters, margin_mm=target_mm / 2.0)
        return _Comparison(
            f"hot spheres of {', '.join(f'{d:g}' for d in diameters)} mm",
            common,
            lambda loaded, fit: place_spheres(loaded.scanned, fit, common, owner=owner, diameters_mm=diameters),
            lambda fit: (0.0, float(fit["hot"])),
        )
    loaded = load_phantom(members[0].phantom, study_dir)
    model = ReferenceModel(loaded.details["reference_volume"], voxel_mm=loaded.details["reference_voxel_mm"])
    common = common_reference(model)
    return _Comparison(
        "the object of one digital reference",
        common,
        lambda loaded, fit: place_reference(loaded.scanned, fit, common, model=model),
        lambda fit: (float(fit["offset"]), float(fit["scale"]) * model.level),
    )


def _prepare_cylinder(members: list[SitePhantom], target_mm: float) -> _Comparison:
    radius = float(np.median([float(member.fit["radius_mm"]) for member in members]))
    lengths = [member.fit.get("length_mm") for member in members]
    known = [float(length) for length in lengths if length]
    ends = len(known) == len(members) and all(member.fit.get("ends_seen") == 2 for member in members)
    if ends:
        half = float(np.median(known)) / 2.0
        words = f"filled cylinder, radius {radius:.0f} mm, length {2 * half:.0f} mm"
    else:
        # Away from any end: within the shortest of the cylinders, and about the middle of the field.
        half = min([length / 2.0 - target_mm for length in known] + [float(target_mm) * 3.0])
        half = max(half, target_mm / 2.0)
        words = f"filled cylinder, radius {radius:.0f} mm, its middle {2 * half:.0f} mm"
    common = common_cylinder(radius_mm=radius, half_length_mm=half, margin_mm=target_mm, ends=ends)
    return _Comparison(
        words,
        common,
        lambda loaded, fit: place_cylinder(loaded.scanned, fit, common, size=(radius, half if ends else None)),
        lambda fit: (0.0, float(fit["inside"])),
    )


def _sampled(member: SitePhantom, comparison: _Comparison, study_dir: Path) -> tuple[Array, Array]:
    """Values at the common points before and after the period's kernel, as shares of the full activity."""
    loaded = load_phantom(member.phantom, study_dir)
    places = comparison.place(loaded, member.fit)
    offset, full = comparison.level(member.fit)
    if not full > 0:
        raise NotComparableError("its fitted activity is not positive")
    in_plane, axial = member.kernel
    scanned = loaded.scanned
    smoothed = smooth_volume(scanned.volume, voxel_mm=scanned.voxel_mm, fwhm_mm=(in_plane, in_plane, axial))
    after = PhantomVolume(np.asarray(smoothed, dtype=np.float64), scanned.voxel_mm)
    first, second = ((sample(volume.volume, places) - offset) / full for volume in (scanned, after))
    return first, second


class _Sums:
    """What is kept of the images of a group: sums by site, and over all periods."""

    def __init__(self, points: int) -> None:
        self.points = points
        self.by_site: dict[str, tuple[int, Array]] = {}
        self.total = np.zeros(points)
        self.squares = np.zeros(points)
        self.count = 0

    def add(self, site: str, values: Array) -> None:
        count, total = self.by_site.get(site, (0, np.zeros(self.points)))
        self.by_site[site] = (count + 1, total + values)
        self.total += values
        self.squares += values**2
        self.count += 1

    def site_means(self) -> Array:
        return np.stack([total / count for count, total in self.by_site.values()])

    def period_cv(self) -> Array:
        mean = self.total / self.count
        variance = np.maximum(self.squares / self.count - mean**2, 0.0) * self.count / max(self.count - 1, 1)
        return np.asarray(np.sqrt(variance) / mean)


def variation(values: Array) -> Array:
    """Coefficient of variation down the columns: standard deviation (n - 1) over mean.

    Parameters
    ----------
    values
        Shape (n, points), n at least 2.

    >>> variation(np.array([[1.0, 2.0], [3.0, 2.0]])).round(4).tolist()
    [0.7071, 0.0]
    """
    return np.asarray(values.std(axis=0, ddof=1) / values.mean(axis=0))


def _figures(before: _Sums, after: _Sums, common: CommonObject) -> dict[str, Any]:
    first, second = before.site_means(), after.site_means()
    level = first.mean(axis=0)
    with np.errstate(all="ignore"):
        used = np.isfinite(level) & (level >= LEAST_LEVEL * np.nanmax(level))
        sites = _pair(variation(first[:, used]), variation(second[:, used]))
        periods = _pair(before.period_cv()[used], after.period_cv()[used])
    depths = _by_depth(first, second, common.depth_mm)
    shown = [row for row in depths if row["level"] >= LEAST_LEVEL]
    profile = None
    if shown:
        roots = [float(np.sqrt(np.mean([row[name] ** 2 for row in shown]))) for name in ("before", "after")]
        profile = _change(*roots)
    return {
        "points": int(used.sum()),
        "between_sites": sites,
        "between_periods": periods,
        "by_depth": depths,
        "profile": profile,
    }


def _pair(before: Array, after: Array) -> dict[str, float]:
    return _change(float(np.mean(before)), float(np.mean(after)))


def _change(before: float, after: float) -> dict[str, float]:
    change = after / before - 1.0 if before > 0 else 0.0
    return {"before": round(before, 6), "after": round(after, 6), "change": round(change, 6)}


def _by_depth(first: Array, second: Array, depth_mm: Array) -> list[dict[str, float]]:
    """Coefficient of variation between sites of the mean at each depth below the surface: noise is averaged away."""
    if not np.all(np.isfinite(depth_mm)):
        return []
    rows = []
    shells = np.rint(depth_mm / DEPTH_STEP_MM).astype(int)
    for shell in range(int(shells.min()), min(int(shells.max()), 8) + 1):
        mine = (shells == shell) & np.isfinite(first).all(axis=0)
        if np.count_nonzero(mine) < 20:
            continue
        pair = [values[:, mine].mean(axis=1) for values in (first, second)]
        if min(float(np.mean(values)) for values in pair) <= 0:
            continue
        rows.append(
            {
                "depth_mm": shell * DEPTH_STEP_MM,
                "level": round(float(np.mean(pair[0])), 5),
                "before": round(float(pair[0].std(ddof=1) / pair[0].mean()), 6),
                "after": round(float(pair[1].std(ddof=1) / pair[1].mean()), 6),
            }
        )
    return rows
