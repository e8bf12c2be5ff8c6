"""What helps to decide: covariates.tsv, the prices of plan.tsv and the regions of the site effect, worked out anew."""

import math
import re
from collections import Counter
from typing import Any

import numpy as np

from evenblur.check.findings import DisagreementError, entry, read_json, read_table, same_number, same_text, table_cell
from evenblur.check.fourier import SIGMA_OF_FWHM
from evenblur.check.handover import DIRECTIONS, Handover, Record, entities
from evenblur.check.periods import Period, four, own_verdict, resulting_se
from evenblur.check.tables import Periods, Target, speaking_period

_STEPS = 20_000
"""Slices of a sphere that are summed: good to 1e-7."""


def check_covariates(bag: Handover, periods: Periods, target: Target) -> int:
    """Compare every cell of covariates.tsv, and each scan's noise factor with its kernel on its grid."""
    name = "results/audit/covariates.tsv"
    rows = read_table(bag.data, name)
    accepted = [row for row in bag.scans if bag.planned_scans[entities(row)]["status"] == "accepted"]
    same_text(f"{name}, rows", len(rows), len(accepted))
    for row, scan in zip(rows, accepted, strict=True):
        key = entities(scan)
        where, record = f"{name}, {key}", bag.scan_records[key]
        period, _, days = speaking_period(bag, periods, scan)
        if period is None:
            raise DisagreementError(where, "is listed, and no period speaks for the scan")
        words = {name: table_cell(scan[name] or "") for name in ("subject", "session", "tracer", "run", "setup")}
        words |= {"site": bag.setup(scan["setup"])["site"], "phantom_session": period.session}
        words |= {"days_from_phantom": "" if days is None else str(days), "verdict": own_verdict(bag, period, target)}
        for column, value in words.items():
            same_text(f"{where}, {column}", row[column], value)
        noise = _noise_factor(bag.scan_intake[key], period.kernel)
        same_number(f"record of {key}, noise factor", f"{math.sqrt(record['noise_variance_factor']):.4f}", noise)
        numbers: Target = {"noise_factor": math.sqrt(record["noise_variance_factor"])}
        for direction in DIRECTIONS:
            numbers |= {
                f"measured_{direction}_mm": period.measured[direction],
                f"target_{direction}_mm": target[direction],
                f"kernel_{direction}_mm": record["kernel"][f"{direction}_mm"],
                f"resulting_{direction}_se_mm": resulting_se(period, target, direction),
            }
        for column, number in numbers.items():
            same_number(f"{where}, {column}", row[column], number)
        same_text(f"{where}, columns", " ".join(sorted(row)), " ".join(sorted([*words, *numbers])))
    return sum(len(row) for row in rows)


def _noise_factor(intake: Record, kernel: dict[str, float | None]) -> float:
    """What white noise's standard deviation is multiplied by: the mean power that the waves of the grid keep.

    A mirrored axis of n voxels has the waves k / (2 n); a Gaussian keeps exp(-4 pi^2 sigma^2 f^2) of a wave's power.
    """
    power = 1.0
    for axis, (length, size) in enumerate(zip(intake["shape"][:3], intake["voxel_mm"], strict=True)):
        width = kernel["axial" if axis == intake["axial_axis"] else "in_plane"] or 0.0
        sigma = width * SIGMA_OF_FWHM / size
        if length > 1 and sigma > 0:
            waves = np.arange(-length, length) / (2 * length)
            power *= float(np.mean(np.exp(-4 * (np.pi * sigma * waves) ** 2)))
    return math.sqrt(power)


def check_prices(bag: Handover, periods: Periods, target: Target) -> int:
    """Compare plan.tsv: which periods each target loses, what it leaves of structures and noise, how scans add up.

    How many scans a target takes in is worked out for the plan's own; of the others the table's sum is compared.
    """
    name = "results/plan.tsv"
    rows = read_table(bag.data, name)
    accepted = sum(scan["status"] == "accepted" for scan in bag.plan["scans"])
    own = sum("the plan's target" in row["origin"].split(";") for row in rows)
    same_text(f"{name}, rows with the plan's target", own, int(target["in_plane"] is not None))
    grids = _usual_grids(bag)
    totals, before = set(), (math.inf, math.inf)
    for row in rows:
        widths = {direction: _width(name, row, direction) for direction in DIRECTIONS}
        where = f"{name}, target {row['target_in_plane_mm']} and {row['target_axial_mm']} mm"
        if (widths["in_plane"], widths["axial"]) >= before:
            raise DisagreementError(where, "does not follow a wider one")
        before = (widths["in_plane"], widths["axial"])
        if "the plan's target" in row["origin"].split(";"):
            for direction in DIRECTIONS:
                same_number(f"{where}, {direction}", widths[direction], target[direction])
            if bag.settings["kernel"] == "quadrature":
                same_text(f"{where}, scans_accepted", row["scans_accepted"], accepted)
        totals.add(int(row["scans_accepted"]) + int(row["scans_lost"]))
        kernels = {period.name: _kernel_for(bag, period, widths) for period in periods.values()}
        lost = [period.name for period in periods.values() if kernels[period.name] == "coarser" and period.in_use]
        same_text(f"{where}, periods_lost", row["periods_lost"], ";".join(lost))
        _check_recovery(where, row, widths)
        _check_noise(bag, where, row, {n: k for n, k in kernels.items() if isinstance(k, dict) and n in grids}, grids)
    if len(totals) > 1:
        raise DisagreementError(name, "its scans accepted and lost do not add up to one number in every row")
    return sum(len(row) for row in rows)


def _width(name: str, row: dict[str, str], direction: str) -> float:
    cell = row[f"target_{direction}_mm"]
    if not re.fullmatch(r"\d+(\.\d{1,4})?", cell):
        raise DisagreementError(name, f"has {cell[:20]} as a target")
    return float(cell)


def _kernel_for(bag: Handover, period: Period, widths: dict[str, float]) -> str | dict[str, float]:
    """The kernel by quadrature that a target gives a period, or the word that there is none."""
    measured = {direction: period.measured[direction] for direction in DIRECTIONS}
    known = {direction: value for direction, value in measured.items() if value is not None}
    if len(known) < len(DIRECTIONS):
        return "unmeasured"
    rules = bag.settings["tolerance"]
    if max(four(known[d] - widths[d]) for d in DIRECTIONS) > rules["achieved_mm"]:
        return "coarser"
    kernels = {d: four(math.sqrt(max(widths[d] ** 2 - known[d] ** 2, 0.0))) for d in DIRECTIONS}
    return {d: kernel if kernel >= rules["no_kernel_below_mm"] else 0.0 for d, kernel in kernels.items()}


def _usual_grids(bag: Handover) -> dict[str, Record]:
    """The intake record of one scan on the grid that most scans of each period have."""
    seen: dict[str, list[Record]] = {}
    for scan in bag.plan["scans"]:
        intake = bag.scan_intake[scan["entities"]]
        if scan["phantom_session"] is not None and intake["voxel_mm"] is not None:
            seen.setdefault(f"{scan['setup']}.{scan['phantom_session']}", []).append(intake)
    grids = {}
    for name, records in seen.items():
        keys = [(*r["shape"][:3], *r["voxel_mm"], r["axial_axis"]) for r in records]
        grids[name] = records[keys.index(Counter(keys).most_common(1)[0][0])]
    return grids


def _check_recovery(where: str, row: dict[str, str], widths: dict[str, float]) -> None:
    for column, cell in row.items():
        sphere = re.fullmatch(r"sphere_([\d.]+)mm", column)
        ribbon = re.fullmatch(r"ribbon_([\d.]+)mm_(in_plane|axial)", column)
        if sphere:
            same_number(f"{where}, {column}", cell, _sphere(float(sphere.group(1)), widths))
        elif ribbon:
            spread = widths[ribbon.group(2)] * SIGMA_OF_FWHM * math.sqrt(2.0)
            same_number(f"{where}, {column}", cell, math.erf(float(ribbon.group(1)) / 2 / spread))


def _sphere(diameter_mm: float, widths: dict[str, float]) -> float:
    """The value in a blurred sphere's middle: its discs, each with the share of the blur that it catches."""
    across, along = (widths[direction] * SIGMA_OF_FWHM for direction in DIRECTIONS)
    radius, step = diameter_mm / 2, diameter_mm / _STEPS
    height = -radius + step * (np.arange(_STEPS) + 0.5)
    disc = 1.0 - np.exp(-(radius**2 - height**2) / (2 * across**2))
    weight = np.exp(-0.5 * (height / along) ** 2) / (along * math.sqrt(2 * math.pi))
    return float(np.sum(disc * weight) * step)


def _check_noise(
    bag: Handover, where: str, row: dict[str, str], kernels: dict[str, dict[str, float]], grids: dict[str, Record]
) -> None:
    white = {name: _noise_factor(grids[name], dict(kernel)) for name, kernel in kernels.items()}
    correlated = {}
    for name, kernel in kernels.items():
        told = _noise_correlation(bag, name)
        if told is not None:
            # Noise whose correlation has the width c is white noise behind a kernel of the width c / sqrt(2).
            ratios = {d: told[d] ** 2 / 2 / (told[d] ** 2 / 2 + kernel[d] ** 2) for d in DIRECTIONS}
            correlated[name] = math.sqrt(ratios["in_plane"] * math.sqrt(ratios["axial"]))
    for column, expected in (("noise_factor_white", white), ("noise_factor_correlated", correlated)):
        pairs = [part.rpartition("=") for part in row[column].split(";") if part]
        same_text(f"{where}, {column}", ";".join(name for name, _, _ in pairs), ";".join(expected))
        for name, _, value in pairs:
            same_number(f"{where}, {column} of {name}", value, expected[name])


def _noise_correlation(bag: Handover, period: str) -> dict[str, float] | None:
    for label in bag.planned_periods[period]["phantoms"]:
        told = entry(bag.resolution, label, "fit", "noise_correlation_mm")
        if isinstance(told, dict) and all(told.get(direction) for direction in DIRECTIONS):
            return {direction: float(told[direction]) for direction in DIRECTIONS}
    return None


# --- the site effect


def check_site_effect(bag: Handover) -> int:
    """Compare site_effect.json: regions from the scans' records, changes and ratios from the numbers beside them.

    How the phantoms compare point by point needs their images and is not worked out.
    """
    name = "results/site_effect/site_effect.json"
    record = read_json(bag.data, name)
    count = _check_regions(bag, name, record)
    for group in record["phantoms"]:
        for part in ("between_sites", "between_periods", "profile"):
            pair = group[part]
            if pair is not None:
                change = pair["after"] / pair["before"] - 1 if pair["before"] > 0 else 0.0
                # Before and after are rounded to six decimals themselves.
                if abs(pair["change"] - change) > 1e-6 * (1 + (1 + abs(change)) / (pair["before"] or 1)):
                    raise DisagreementError(f"{name}, {group['kind']}, {part}", "its change is not after / before - 1")
                count += 1
    for row in record["scale"]:
        if row["ratio"] is not None:
            same_number(f"{name}, {row['phantom']}", row["ratio"], row["measured_kbq_ml"] / row["true_kbq_ml"])
            level = entry(bag.resolution, row["phantom"], "fit", "inside")
            units = (level * 10.0**power for power in (-3, 0, 3))  # Bq, kBq and MBq a millilitre
            if not any(math.isclose(row["measured_kbq_ml"], value, rel_tol=5e-6) for value in units):
                raise DisagreementError(f"{name}, {row['phantom']}", "measured_kbq_ml is not the fitted level")
            count += 2
    return count


def _regional_means(bag: Handover) -> dict[str, dict[str, Record]]:
    """By region and scan: `before`, `after`."""
    found: dict[str, dict[str, Record]] = {}
    for scan in bag.scans:
        key = entities(scan)
        served = any(
            row["subject"] in (None, scan["subject"]) and row["session"] in (None, scan["session"])
            for row in bag.regions
        )
        if served and bag.planned_scans[key]["status"] == "accepted":
            regions = read_json(bag.data, f"results/site_effect/regions/{key}.json")["regions"]
            for region, means in regions.items():
                if means["before"] is not None:
                    found.setdefault(region, {})[key] = means
    return found


def _check_regions(bag: Handover, name: str, record: Record) -> int:
    means = _regional_means(bag)
    references = sorted({row["region"] for row in bag.regions if row["reference"] == "yes"} & set(means))
    same_text(f"{name}, regions", ", ".join(row["region"] for row in record["regions"]), ", ".join(means))
    count = 0
    for row in record["regions"]:
        divided = any(r["reference"] == "yes" for r in bag.regions) and row["region"] not in references
        for side in ("before", "after"):
            groups: dict[str, list[float]] = {}
            for key, own in means[row["region"]].items():
                parts = [means[region][key][side] for region in references if key in means[region]]
                if not divided or parts:
                    site = bag.setup(bag.rows[key]["setup"])["site"]
                    groups.setdefault(site, []).append(own[side] * len(parts) / sum(parts) if divided else own[side])
            count += _check_variance(f"{name}, {row['region']}, {side}", row[side], groups)
    return count


def _check_variance(where: str, told: Record | None, groups: dict[str, list[float]]) -> int:
    """One-way analysis of variance, sites as groups; intervals and p are not worked out."""
    if (told is None) != (len(groups) < 2):
        raise DisagreementError(where, "is compared, or left out, against the number of sites")
    if told is None:
        return 0
    number, sites = sum(map(len, groups.values())), len(groups)
    means = [math.fsum(values) / len(values) for values in groups.values()]
    middle = math.fsum(means) / sites
    spread = math.sqrt(math.fsum((mean - middle) ** 2 for mean in means) / (sites - 1))
    expected: dict[str, float | None] = {"sites": sites, "scans": number}
    expected["variation"] = spread / abs(middle) if middle else None
    grand = math.fsum(value for values in groups.values() for value in values) / number
    between = math.fsum(len(v) * (mean - grand) ** 2 for v, mean in zip(groups.values(), means, strict=True))
    within = math.fsum((x - mean) ** 2 for v, mean in zip(groups.values(), means, strict=True) for x in v)
    told_of = dict.fromkeys(("f", "eta_squared", "share"))
    if number > sites and within > 0:
        f = between / (sites - 1) / (within / (number - sites))
        size = (number - math.fsum(len(v) ** 2 for v in groups.values()) / number) / (sites - 1)
        share = max((f - 1) / (f - 1 + size), 0.0) if f > 1 else 0.0
        told_of = {"f": f, "eta_squared": between / (between + within), "share": share}
    for column, value in {**expected, **told_of}.items():
        _same_figures(f"{where}, {column}", told[column], value)
    return len(expected) + len(told_of)


def _same_figures(where: str, found: Any, expected: float | None) -> None:
    """Compare with a number of six significant digits; its last one decides."""
    if (found is None) != (expected is None):
        raise DisagreementError(where, f"says {found}, and {expected} follows from the records")
    if found is not None and expected is not None:
        unit = 10.0 ** (math.floor(math.log10(abs(expected))) - 5) if expected else 1e-12
        if abs(found - expected) > 0.5000001 * unit:
            raise DisagreementError(where, f"says {found:.6g}, and {expected:.6g} follows from the records")
