"""The price of a target, before anything is smoothed: what each candidate width loses, shows and leaves as noise."""

from collections import Counter
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from itertools import pairwise
from math import sqrt
from typing import Any

from evenblur.kernels import kernel_facts
from evenblur.partial_volume import correlated_noise_factor, slab_recovery, sphere_recovery
from evenblur.plan.combining import DIRECTIONS, PeriodWidth, rounded
from evenblur.plan.planning import make_plan
from evenblur.plan.targets import Candidate, decide_target
from evenblur.study.reading import Study
from evenblur.widths import sigma_from_fwhm

ROUND_FIGURES_MM = (5.0, 6.0, 7.0, 8.0, 10.0)
"""Targets that studies often agree on (common practice, no source)."""

SPHERES_MM = (5.0, 10.0, 15.0, 20.0)
"""Diameters of the structures whose recovery is shown."""

RIBBON_MM = 3.0
"""Thickness of the ribbon of cortex whose recovery is shown."""

Record = Mapping[str, Any]
Grid = tuple[tuple[int, int, int], tuple[float, float, float], int]


@dataclass(frozen=True)
class Noise:
    """What a period's kernel does to the standard deviation of noise.

    Attributes
    ----------
    white
        The factor for noise that is independent from voxel to voxel, on the grid of most of the period's scans.
    correlated
        The factor for noise as correlated as in the period's own phantom; None where no phantom tells.
    """

    white: float
    correlated: float | None


@dataclass(frozen=True)
class Price:
    """What one target costs.

    Attributes
    ----------
    in_plane_mm, axial_mm
        The target.
    origins
        Where it comes from, in words.
    lost_periods
        Periods in use that are coarser than it.
    scans_accepted, scans_lost
        Scans that it takes in, and scans that a wider target of the list would take in.
    spheres, ribbon_in_plane, ribbon_axial
        Recovery in the middle of each of `SPHERES_MM`, and of the ribbon whose thickness lies across or along the bed.
    noise
        By period that has a kernel and a scan to tell the grid.
    """

    in_plane_mm: float
    axial_mm: float
    origins: tuple[str, ...]
    lost_periods: tuple[str, ...]
    scans_accepted: int
    scans_lost: int
    spheres: tuple[float, ...]
    ribbon_in_plane: float
    ribbon_axial: float
    noise: Mapping[str, Noise]

    @property
    def words(self) -> str:
        """The target in words: `8 mm`, or `8 mm in-plane and 7 mm axial`."""
        return target_words(self.in_plane_mm, self.axial_mm)


@dataclass(frozen=True)
class Drop:
    """The target when the coarsest periods, one after the other, are left out."""

    without: tuple[str, ...]
    in_plane_mm: float
    axial_mm: float


@dataclass(frozen=True)
class Prices:
    """The table of prices, in the order of the targets, and what each coarse period costs as sentences."""

    prices: tuple[Price, ...]
    sentences: tuple[str, ...]


def target_words(in_plane_mm: float, axial_mm: float) -> str:
    """A target in words.

    >>> target_words(8.0, 8.0), target_words(8.0, 7.5)
    ('8 mm', '8 mm in-plane and 7.5 mm axial')
    """
    if in_plane_mm == axial_mm:
        return f"{in_plane_mm:g} mm"
    return f"{in_plane_mm:g} mm in-plane and {axial_mm:g} mm axial"


def price_targets(
    study: Study,
    *,
    plan: Record,
    scans_intake: Mapping[str, Record],
    phantoms_intake: Mapping[str, Record],
    resolution: Mapping[str, Record],
    outputs: Mapping[str, str] | None = None,
) -> Prices:
    """What each candidate target costs, each by a whole plan made for it (kernels by quadrature).

    Parameters
    ----------
    study
        The study's settings and tables.
    plan
        The plan as it stands.
    scans_intake, phantoms_intake, resolution, outputs
        The records that the plan was made from, as `evenblur.plan.planning.make_plan` takes them.

    Returns
    -------
    Prices
        Candidates: the plan's own target, the width that each period in use would set, and `ROUND_FIGURES_MM`.
    """
    drops = drop_coarsest(study, plan)
    found: dict[tuple[float, float], list[str]] = {}
    if plan["target"]["in_plane_mm"] is not None:
        own = (plan["target"]["in_plane_mm"], plan["target"]["axial_mm"])
        found.setdefault(own, []).append("the plan's target")
    for index, drop in enumerate(drops):
        next_out = drops[index + 1].without[len(drop.without) :] if index + 1 < len(drops) else ()
        by = f"set by {', '.join(next_out)}" if next_out else "set by the sharpest period"
        found.setdefault((drop.in_plane_mm, drop.axial_mm), []).append(by)
    for figure in ROUND_FIGURES_MM:
        found.setdefault((figure, figure), []).append("round figure")
    plans = {
        target: make_plan(
            _fixed(study, target),
            scans_intake=scans_intake,
            phantoms_intake=phantoms_intake,
            resolution=resolution,
            outputs=outputs,
        )
        for target in sorted(found, reverse=True)
    }
    admitted = {key for made in plans.values() for key in _accepted(made)}
    grids, correlations = _grids(plan, scans_intake), _noise_correlations(plan, resolution)
    prices = tuple(
        _price(target, tuple(found[target]), made, admitted=admitted, grids=grids, correlations=correlations)
        for target, made in plans.items()
    )
    by_target = {(price.in_plane_mm, price.axial_mm): price for price in prices}
    return Prices(prices, tuple(_sentences(drops, by_target, study.settings.tolerance.achieved_mm)))


def drop_coarsest(study: Study, plan: Record) -> list[Drop]:
    """The targets that `choose: coarsest` would set when the coarsest period is left out, then the next, and so on.

    Periods that do not move the rounded target are dropped together with the one before them.
    """
    settings = study.settings.target.model_copy(update={"choose": "coarsest"})
    left = [candidate for candidate in _candidates(plan) if _may_set(candidate, settings.declared_counts)]

    def limit(candidate: Candidate) -> float:
        counting = [w for w in candidate.widths.values() if settings.declared_counts or w.source != "declared"]
        return max(width.fwhm_mm + settings.allowance_se * width.se_mm for width in counting)

    left.sort(key=lambda candidate: (-limit(candidate), candidate.name))
    drops: list[Drop] = []
    without: tuple[str, ...] = ()
    while left:
        target = decide_target(settings, left)
        if target.in_plane_mm is None or target.axial_mm is None:
            break
        if not drops or (drops[-1].in_plane_mm, drops[-1].axial_mm) != (target.in_plane_mm, target.axial_mm):
            drops.append(Drop(without, target.in_plane_mm, target.axial_mm))
        without = (*without, left.pop(0).name)
    return drops


def _may_set(candidate: Candidate, declared_counts: bool) -> bool:
    return declared_counts or any(width.source != "declared" for width in candidate.widths.values())


def _candidates(plan: Record) -> list[Candidate]:
    """Periods in use with both widths, as the plan itself weighs them."""
    found = []
    for period in plan["periods"]:
        widths = {}
        for direction in DIRECTIONS:
            width = period["measured"][f"{direction}_mm"]
            if width is not None:
                error = period["measured"][f"{direction}_se_mm"]
                widths[direction] = PeriodWidth(width, error, None, period["source"][direction])
        if len(widths) == len(DIRECTIONS) and period["in_use"]:
            found.append(Candidate(_name(period), widths))
    return found


def _name(period: Record) -> str:
    return f"{period['setup']}.{period['phantom_session']}"


def _fixed(study: Study, target: tuple[float, float]) -> Study:
    """The study with this target, whoever may have to approve it; coarse scans are held and do not stop the plan."""
    part = study.settings.target.model_copy(update={"choose": "fixed", "in_plane_mm": target[0], "axial_mm": target[1]})
    settings = study.settings.model_copy(update={"target": part, "coarser_than_target": "hold"})
    return Study(settings, study.setups, study.phantoms, study.scans, study.by_setup, study.by_phantom)


def _accepted(plan: Record) -> set[str]:
    return {scan["entities"] for scan in plan["scans"] if scan["status"] == "accepted"}


def _grids(plan: Record, intake: Mapping[str, Record]) -> dict[str, Grid]:
    """The grid (shape, voxel size, axial axis) of most scans of each period."""
    seen: dict[str, Counter[Grid]] = {}
    for scan in plan["scans"]:
        record = intake[scan["entities"]]
        if scan["phantom_session"] is not None and record["voxel_mm"] is not None:
            shape, voxel = record["shape"], record["voxel_mm"]
            grid = ((shape[0], shape[1], shape[2]), (voxel[0], voxel[1], voxel[2]), record["axial_axis"])
            seen.setdefault(f"{scan['setup']}.{scan['phantom_session']}", Counter())[grid] += 1
    return {name: counts.most_common(1)[0][0] for name, counts in seen.items()}


def _noise_correlations(plan: Record, resolution: Mapping[str, Record]) -> dict[str, tuple[float, float]]:
    """Widths of the noise's autocorrelation in the phantoms of each period, where a phantom tells them."""
    found: dict[str, tuple[float, float]] = {}
    for period in plan["periods"]:
        for label in period["phantoms"]:
            told = ((resolution.get(label) or {}).get("fit") or {}).get("noise_correlation_mm")
            if isinstance(told, Mapping) and all(told.get(direction) for direction in DIRECTIONS):
                found.setdefault(_name(period), (float(told["in_plane"]), float(told["axial"])))
    return found


def _price(
    target: tuple[float, float],
    origins: tuple[str, ...],
    plan: Record,
    *,
    admitted: set[str],
    grids: Mapping[str, Grid],
    correlations: Mapping[str, tuple[float, float]],
) -> Price:
    in_plane, axial = target
    accepted = _accepted(plan)
    noise = {}
    for period in plan["periods"]:
        name = _name(period)
        if period["status"] in ("smooth", "at_target") and name in grids:
            kernel = period["kernel"]
            noise[name] = _noise(kernel["in_plane_mm"], kernel["axial_mm"], grids[name], correlations.get(name))
    return Price(
        in_plane_mm=in_plane,
        axial_mm=axial,
        origins=origins,
        lost_periods=tuple(_name(p) for p in plan["periods"] if p["status"] == "coarser" and p["in_use"]),
        scans_accepted=len(accepted),
        scans_lost=len(admitted - accepted),
        spheres=tuple(sphere_recovery(size, in_plane_mm=in_plane, axial_mm=axial) for size in SPHERES_MM),
        ribbon_in_plane=slab_recovery(RIBBON_MM, fwhm_mm=in_plane),
        ribbon_axial=slab_recovery(RIBBON_MM, fwhm_mm=axial),
        noise=noise,
    )


def _noise(in_plane_mm: float, axial_mm: float, grid: Grid, correlation: tuple[float, float] | None) -> Noise:
    shape, voxel, axial_axis = grid
    sigmas = [
        sigma_from_fwhm(axial_mm if axis == axial_axis else in_plane_mm) / size for axis, size in enumerate(voxel)
    ]
    facts = kernel_facts(shape, sigma_voxels=(sigmas[0], sigmas[1], sigmas[2]))
    correlated = None
    if correlation is not None:
        correlated = rounded(correlated_noise_factor(correlation, in_plane_mm=in_plane_mm, axial_mm=axial_mm))
    return Noise(rounded(sqrt(facts.noise_variance_factor)), correlated)


def _sentences(drops: Sequence[Drop], prices: Mapping[tuple[float, float], Price], tolerance_mm: float) -> list[str]:
    """What leaving out the coarsest periods buys and costs, one sentence a step."""
    found = []
    for earlier, drop in pairwise(drops):
        before, after = prices[earlier.in_plane_mm, earlier.axial_mm], prices[drop.in_plane_mm, drop.axial_mm]
        names = drop.without[len(earlier.without) :]
        stays = [name for name in names if name not in after.lost_periods]
        cost = after.scans_lost - before.scans_lost
        scans = "no scan" if cost == 0 else f"{cost} scan{'' if cost == 1 else 's'}"
        also = " as well" if earlier.without else ""
        lost = [name for name in after.lost_periods if name not in before.lost_periods]
        text = (
            f"Without {_list(names)}{also} the target falls from {before.words} to {after.words} at the cost of {scans}"
        )
        if lost and lost != list(names):
            text += f" of {_list(lost)}"
        if earlier.without:
            text += f" ({after.scans_lost} in all)"
        if stays:
            text += (
                f"; {_list(stays)} {'stays' if len(stays) == 1 else 'stay'} in, within the tolerance of "
                f"{tolerance_mm:g} mm"
            )
        found.append(f"{text}.")
    return found


def _list(names: Sequence[str]) -> str:
    return names[0] if len(names) == 1 else f"{', '.join(names[:-1])} and {names[-1]}"
