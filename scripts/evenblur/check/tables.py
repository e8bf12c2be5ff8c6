"""The plan and the audit's tables, row by row, against what follows from the study and the records."""

import datetime
import json
from collections import Counter
from collections.abc import Iterable
from typing import Any

from evenblur.check.findings import DisagreementError, entry, read_table, same_codes, same_number, same_text, table_cell
from evenblur.check.handover import DIRECTIONS, Handover, Record, entities, output_path
from evenblur.check.periods import Period, achieved_width, own_verdict, resulting_se

Periods = dict[str, Period]
Target = dict[str, float | None]

BY_ROWS = frozenset(
    {
        "excluded_by_decision",
        "duplicate_image",
        "no_phantom_session",
        "setup_changed",
        "phantom_expired",
        "unmeasured",
        "coarser_than_target",
    }
)
"""Reasons to hold a scan that follow from the study's rows, the intake records and the periods alone."""


def check_plan(bag: Handover, periods: Periods, target: Target) -> int:
    """Compare plan.json: the target, every period's numbers, every scan's session and reasons."""
    count = 0
    for direction in DIRECTIONS:
        same_number(f"plan.json, target {direction}", bag.plan["target"][f"{direction}_mm"], target[direction])
    same_text("plan.json, periods", ", ".join(bag.planned_periods), ", ".join(periods))
    for name, period in periods.items():
        entry_of = bag.planned_periods[name]
        where = f"plan.json, period {name}"
        for direction in DIRECTIONS:
            numbers = {
                ("measured", f"{direction}_mm"): period.measured[direction],
                ("measured", f"{direction}_se_mm"): period.se[direction],
                ("statistical", f"{direction}_se_mm"): period.statistical[direction],
                ("kernel", f"{direction}_mm"): period.kernel[direction],
                ("quadrature", f"{direction}_mm"): period.quadrature[direction],
            }
            for keys, value in numbers.items():
                same_number(f"{where}, {' '.join(keys)}", entry(entry_of, *keys), value)
                count += 1
            same_text(f"{where}, source {direction}", entry_of["source"][direction], period.source[direction])
        same_text(f"{where}, status", entry_of["status"], period.status)
        same_text(f"{where}, rule", entry_of["kernel"]["rule"], period.rule)
        if name in bag.achieved:
            for direction in DIRECTIONS:
                used = bag.achieved[name]["kernel"][f"{direction}_mm"]
                same_number(f"achieved/{name}.json, kernel {direction}", used, period.kernel[direction])
    same_text("plan.json, scans", ", ".join(bag.planned_scans), ", ".join(entities(row) for row in bag.scans))
    for row in bag.scans:
        _check_planned_scan(bag, periods, row)
    return count + len(bag.scans)


def _check_planned_scan(bag: Handover, periods: Periods, row: Record) -> None:
    name = entities(row)
    scan, where = bag.planned_scans[name], f"plan.json, scan {name}"
    period, reason, days = speaking_period(bag, periods, row)
    same_text(f"{where}, phantom_session", scan["phantom_session"], period.session if period else None)
    same_text(f"{where}, days_from_phantom", scan["days_from_phantom"], days)
    same_text(f"{where}, sha256", scan["sha256"], bag.scan_intake[name]["sha256"])
    same_text(f"{where}, image", scan["image"], row["image"])
    expected = set(bag.scan_intake[name]["holds"]) | ({reason} if reason else set())
    if row["use"] == "no":
        expected.add("excluded_by_decision")
    if name in bag.copies:
        expected.add("duplicate_image")
    found = set(scan["reasons"])
    others = found - BY_ROWS - expected
    if period is not None and (period.in_use or not expected | others):
        expected |= {"unmeasured": {"unmeasured"}, "coarser": {"coarser_than_target"}}.get(period.status, set())
    # What the rows do not tell (grids, reconstructions) stands as the plan has it.
    same_codes(f"{where}, reasons", ";".join(found), expected | others)
    same_text(f"{where}, status", scan["status"], "held" if found else "accepted")


def speaking_period(bag: Handover, periods: Periods, row: Record) -> tuple[Period | None, str | None, int | None]:
    """The period that a scan belongs to with its days from the phantom, or the reason why there is none."""
    rules, setup = bag.settings["phantoms"], bag.setup(row["setup"])
    own = [period for period in periods.values() if period.setup == row["setup"]]
    if own and own[0].session == "declared" and not own[0].phantoms:
        return own[0], None, None
    day = datetime.date.fromisoformat(row["acquired"])
    ages = {p.name: (day - datetime.date.fromisoformat(p.acquired)).days for p in own}
    usable = [p for p in own if rules["choose"] == "nearest" or ages[p.name] >= 0]
    if not usable:
        return None, "no_phantom_session", None
    usable.sort(key=lambda period: (abs(ages[period.name]), period.acquired))
    free = [p for p in usable if not _changed_between(setup, p.acquired, row["acquired"])]
    if not free:
        return None, "setup_changed", None
    best, age = free[0], ages[free[0].name]
    limited = best.valid_until and age >= 0
    speaks = row["acquired"] <= best.valid_until if limited else abs(age) <= rules["valid_days"]
    return (best, None, age) if speaks else (None, "phantom_expired", None)


def _changed_between(setup: Record, phantom: str, scan: str) -> bool:
    early, late = sorted((phantom, scan))
    return any(early < change <= late for change in setup["changed"])


def check_sites(bag: Handover, periods: Periods, target: Target) -> int:
    """Compare every cell of sites.tsv."""
    name = "results/audit/sites.tsv"
    rows = read_table(bag.data, name)
    same_text(name, ", ".join(f"{row['setup']}.{row['phantom_session']}" for row in rows), ", ".join(periods))
    odd = odd_versions(bag)
    for row, period in zip(rows, periods.values(), strict=True):
        where = f"{name}, {period.name}"
        _check_site_words(bag, row, period, where, odd)
        same_text(f"{where}, verdict", row["verdict"], own_verdict(bag, period, target))
        for direction in DIRECTIONS:
            numbers = {
                f"measured_{direction}_mm": period.measured[direction],
                f"measured_{direction}_se_mm": period.se[direction],
                f"target_{direction}_mm": target[direction],
                f"kernel_{direction}_mm": period.kernel[direction],
                f"achieved_{direction}_mm": achieved_width(bag, period, direction),
                f"quadrature_kernel_{direction}_mm": period.quadrature[direction],
                f"resulting_{direction}_se_mm": resulting_se(period, target, direction),
            }
            for column, value in numbers.items():
                same_number(f"{where}, {column}", row[column], value)
    return sum(len(row) for row in rows)


def _check_site_words(bag: Handover, row: dict[str, str], period: Period, where: str, odd: set[str]) -> None:
    setup = bag.setup(period.setup)
    labels = [phantom["phantom"] for phantom in period.phantoms]
    records = [bag.resolution[label] for label in labels if label in bag.resolution]
    hashes = [bag.phantom_intake[label]["sha256"] for label in labels]
    for label in labels:
        if label in bag.resolution:
            used = entry(bag.resolution, label, "input", "sha256")
            same_text(f"resolution/{label}.json, input sha256", used, bag.phantom_intake[label]["sha256"])
    planned = bag.planned_periods[period.name]
    members = [s for s in bag.plan["scans"] if (s["setup"], s["phantom_session"]) == (period.setup, period.session)]
    words = {
        "site": setup["site"],
        "scanner": table_cell(setup["scanner"]),
        "reconstruction": table_cell(setup["reconstruction"]),
        "phantom_kinds": ";".join(dict.fromkeys(record["kind"] for record in records)),
        "phantom_sha256": ";".join(filter(None, hashes)),
        "kernel_rule": period.rule,
        "scans_accepted": sum(scan["status"] == "accepted" for scan in members),
        "scans_held": sum(scan["status"] == "held" for scan in members),
    }
    for column, value in words.items():
        same_text(f"{where}, {column}", row[column], value)
    flags = codes(planned["flags"], *(record["flags"] for record in records))
    flags |= codes(bag.achieved.get(period.name, {}).get("flags", []))
    flags |= {"mixed_versions"} if any(scan["entities"] in odd for scan in members) else set()
    same_codes(f"{where}, flags", row["flags"], flags)


def check_scans(bag: Handover, periods: Periods) -> int:
    """Compare every cell of scans.tsv, and each scan's record with the plan."""
    name = "results/audit/scans.tsv"
    rows = read_table(bag.data, name)
    same_text(
        name,
        ", ".join(f"{r['subject']} {r['session']}" for r in rows),
        ", ".join(f"{r['subject']} {r['session']}" for r in bag.scans),
    )
    odd = odd_versions(bag)
    token = entry(bag.code, "steps", "smooth_scan.py")
    for row, scan in zip(rows, bag.scans, strict=True):
        key = entities(scan)
        where, planned, intake = f"{name}, {key}", bag.planned_scans[key], bag.scan_intake[key]
        record = bag.scan_records.get(key, {})
        period = periods.get(f"{scan['setup']}.{planned['phantom_session']}")
        if record:
            _check_record(bag, scan, record, period, token)
        _, _, days = speaking_period(bag, periods, scan)
        sizes = record.get("voxel_mm") or intake["voxel_mm"] or []
        words = {
            "setup": scan["setup"],
            "phantom_session": planned["phantom_session"],
            "status": planned["status"],
            "reasons": ";".join(planned["reasons"]),
            "frames": record.get("frames") or intake["frames"],
            "input": " ".join(scan["image"].split()),
            "input_sha256": intake["sha256"],
            "output": output_path(scan, bag.settings) if record else "",
            "output_sha256": entry(record, "output", "sha256"),
            "smoothing_version": record.get("smoothing_version"),
            "days_from_phantom": days,
            "total_before": _total(record.get("total_before_ml")),
            "total_after": _total(record.get("total_after_ml")),
        }
        for column, value in words.items():
            same_text(f"{where}, {column}", row[column], value)
        for direction in DIRECTIONS:
            applied = period.kernel[direction] if record and period else None
            same_number(f"{where}, kernel_{direction}_mm", row[f"kernel_{direction}_mm"], applied)
        cells = row["voxel_mm"].split(";") if row["voxel_mm"] else []
        same_text(f"{where}, voxel_mm", len(cells), len(sizes))
        for cell, size in zip(cells, sizes, strict=True):
            same_number(f"{where}, voxel_mm", cell, size)
        flags = codes(intake["flags"], planned["flags"], record.get("flags", []))
        same_codes(f"{where}, flags", row["flags"], flags | ({"mixed_versions"} if key in odd else set()))
    return sum(len(row) for row in rows)


def _total(value: float | None) -> str:
    return "" if value is None else f"{value:.10g}"


def _check_record(bag: Handover, scan: Record, record: Record, period: Period | None, token: Any) -> None:
    """A scan's record names the image that was taken in, its period's kernel, and the code that the bag names."""
    where = f"record of {entities(scan)}"
    if period is None:
        raise DisagreementError(where, "is there, and no period speaks for the scan")
    intake = bag.scan_intake[entities(scan)]
    same_text(f"{where}, input sha256", entry(record, "input", "sha256"), intake["sha256"])
    same_text(f"{where}, input voxels_sha256", entry(record, "input", "voxels_sha256"), intake["voxels_sha256"])
    same_text(f"{where}, setup", record.get("setup"), scan["setup"])
    for direction in DIRECTIONS:
        key = f"{direction}_mm"
        same_number(f"{where}, kernel {key}", entry(record, "kernel", key), period.kernel[direction])
        same_number(f"{where}, target {key}", entry(record, "target", key), bag.plan["target"][key])
    same_text(f"{where}, smoothing_version", str(record["smoothing_version"]).partition("+")[2], token)


def check_images(bag: Handover) -> int:
    """Compare images.tsv with the records."""
    name = "images.tsv"
    expected: list[tuple[str, str, str, Any, Any]] = []
    packed_images = bag.settings["handover"]["include_images"]
    rows = read_table(bag.data, name)
    for row in bag.phantoms:
        intake, label = bag.phantom_intake[row["phantom"]], row["phantom"]
        expected.append(("phantom", label, row["image"], intake["sha256"], intake["voxels_sha256"]))
        identity = entry(bag.resolution, label, "input", "reference_sha256")
        if any(r["item"] == "reference" and r["key"] == label for r in rows):
            expected.append(("reference", label, row["details"]["reference"], identity, ""))
    for row in bag.scans:
        intake = bag.scan_intake[entities(row)]
        expected.append(("scan", entities(row), row["image"], intake["sha256"], intake["voxels_sha256"]))
    for key, record in bag.scan_records.items():
        path = output_path(bag.rows[key], bag.settings)
        output = record["output"]
        expected.append(("harmonised", key, path, output["sha256"], output["voxels_sha256"]))
    same_text(f"{name}, rows", len(rows), len(expected))
    for row, values in zip(rows, expected, strict=True):
        columns = ("item", "key", "path", "sha256", "voxels_sha256")
        for column, value in zip(columns, values, strict=True):
            same_text(f"{name}, {values[1]}, {column}", row[column], value)
        if row["packed"] and not (bag.data / row["packed"]).is_file():
            raise DisagreementError(f"{name}, {values[1]}", f"names {row['packed']}, which is not in the bag")
        if row["item"] == "harmonised" and bool(row["packed"]) != packed_images:
            raise DisagreementError(
                f"{name}, {values[1]}", "disagrees with the study's setting handover.include_images"
            )
    return len(rows)


def codes(*lists: Iterable[Any]) -> set[str]:
    """The codes of several lists of flags."""
    return {flag["code"] for flags in lists for flag in flags}


def odd_versions(bag: Handover) -> set[str]:
    """Scans whose record names other versions than most do."""
    made = {
        key: json.dumps([record.get("smoothing_version"), record.get("versions")], sort_keys=True)
        for key, record in bag.scan_records.items()
    }
    counts = Counter(made.values())
    if len(counts) < 2:
        return set()
    most = max(counts.values())
    usual = min((text for text, count in counts.items() if count == most))
    return {key for key, text in made.items() if text != usual}
