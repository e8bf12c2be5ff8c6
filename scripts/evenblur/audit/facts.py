"""The audit's data, computed once from the records of a run: `audit.json`."""

from collections import Counter
from math import sqrt
from pathlib import Path
from statistics import median
from typing import Any

import evenblur
from evenblur.audit import model
from evenblur.audit.inputs import AuditInput, Row, faults, scan_entities, stray_files
from evenblur.audit.intervals import period_intervals
from evenblur.audit.periods import DIRECTIONS, flag_texts, periods_of, site_of, version_of
from evenblur.audit.queries import excluded, queries_rows, verdict_sentence
from evenblur.audit.self_checks import halves_of
from evenblur.audit.sentences import spoken, target_sentences, verdict_line
from evenblur.audit.standing_out import standing_out
from evenblur.audit.tables import scans_rows, sites_rows
from evenblur.codes import meaning
from evenblur.command import read_record

_LISTS = {"phantom_kinds", "phantom_sha256", "flags", "reasons"}
_WHOLE = {"scans_accepted", "scans_held", "frames", "days_from_phantom"}
_NUMBERS = {"total_before", "total_after"}


def typed(row: dict[str, str]) -> dict[str, Any]:
    """A row of an audit table with its cells as numbers, lists or text; None for a number that is not there.

    >>> typed({"setup": "A", "kernel_axial_mm": "4.25", "kernel_in_plane_mm": "", "flags": "a;b", "frames": "6"})
    {'setup': 'A', 'kernel_axial_mm': 4.25, 'kernel_in_plane_mm': None, 'flags': ['a', 'b'], 'frames': 6}
    """
    found: dict[str, Any] = {}
    for name, cell in row.items():
        if name in _LISTS:
            found[name] = cell.split(";") if cell else []
        elif name == "voxel_mm":
            found[name] = [float(part) for part in cell.split(";")] if cell else []
        elif name in _WHOLE:
            found[name] = int(cell) if cell else None
        elif name.endswith("_mm") or name in _NUMBERS:
            found[name] = float(cell) if cell else None
        else:
            found[name] = cell
    return found


def audit_record(audit: AuditInput, *, history: Row | None = None) -> model.AuditRecord:
    """Everything that the audit says, as one record.

    Parameters
    ----------
    audit
        The records of a run.
    history
        Head of the change log (`lines`, `sha256`), where the study keeps one.
    """
    periods, scans = _periods(audit), _scans(audit)
    return model.AuditRecord(
        program=model.ProgramRecord(version=evenblur.__version__),
        study=model.StudyRecord(
            title=audit.settings["study"]["title"],
            modality=audit.settings.get("modality", "pet"),
            demo=bool(audit.settings.get("demo")),
        ),
        summary=_summary(audit, periods, scans),
        target=_target(audit),
        periods=periods,
        other_kinds=_other_kinds(audit),
        scans=scans,
        phantoms=_phantoms(audit),
        queries=[model.QueryRecord(**row) for row in queries_rows(audit)],
        exclusions=_exclusions(audit),
        versions=_versions(audit),
        methods=_methods(audit),
        settings=dict(audit.settings),
        history=None if history is None else model.HistoryRecord(lines=history["lines"], sha256=history["sha256"]),
    )


def history_head(results: Path) -> Row | None:
    """Head of the change log as the run recorded it, or None where the study keeps none.

    Raises
    ------
    InputError
        If the record is damaged.
    """
    path = results / "audit" / "history.json"
    return read_record(path) if path.is_file() else None


def _summary(
    audit: AuditInput, periods: list[model.PeriodRecord], scans: list[model.ScanRecord]
) -> model.SummaryRecord:
    counts = {
        "periods": len(periods),
        "passing": sum(period.verdict == "pass" for period in periods),
        "idle": sum(period.verdict == "pass" and not period.scans_accepted + period.scans_held for period in periods),
        "accepted": sum(scan.status == "accepted" for scan in scans),
        "held": sum(scan.status == "held" for scan in scans),
    }
    strays, wrong = stray_files(audit), faults(audit)
    clean = not strays and not wrong
    return model.SummaryRecord(
        sentence=verdict_line(counts, clean=clean),
        periods=counts["periods"],
        periods_passing=counts["passing"],
        scans_accepted=counts["accepted"],
        scans_held=counts["held"],
        clean=clean,
        stray_files=strays,
        faults=wrong,
    )


def _target(audit: AuditInput) -> model.TargetRecord:
    target = audit.plan.get("target", {})
    return model.TargetRecord(
        in_plane_mm=target.get("in_plane_mm"),
        axial_mm=target.get("axial_mm"),
        sentences=target_sentences(audit),
        **{name: spoken(target.get(name)) for name in ("choose", "decided_by", "on", "reason")},
    )


def _periods(audit: AuditInput) -> list[model.PeriodRecord]:
    periods, rows, entries = periods_of(audit), sites_rows(audit), audit.plan.get("periods", [])
    tolerance_mm = audit.settings["tolerance"]["achieved_mm"]
    apart = standing_out(periods, tolerance_mm=tolerance_mm)
    noise = _noise_factors(audit)
    found = []
    for period, row, entry in zip(periods, rows, entries, strict=True):
        more: dict[str, Any] = {"status": period.status}
        for name in DIRECTIONS:
            measured, resulting = period_intervals(audit, period, name)
            more[f"measured_{name}_half_interval_mm"] = _rounded(measured)
            more[f"resulting_{name}_half_interval_mm"] = _rounded(resulting)
            more[f"{name}_source"] = str((entry.get("source") or {}).get(name) or "")
        found.append(
            model.PeriodRecord(
                **typed(row),
                **more,
                acquired=str(entry.get("acquired") or ""),
                phantoms=list(period.phantoms),
                noise_factor=noise.get((period.setup, period.phantom_session)),
                why="" if period.verdict == "pass" else verdict_sentence(period, tolerance_mm=tolerance_mm)[0],
                stands_out=apart[period.name],
                flag_texts=_flags(period.flags),
            )
        )
    return found


def _rounded(value: float | None) -> float | None:
    return None if value is None else round(value, 4)


def _flags(flags: Any) -> list[model.FlagRecord]:
    return [model.FlagRecord(code=code, text=text or meaning(code)) for code, text in flags.items()]


def _noise_factors(audit: AuditInput) -> dict[tuple[str, str], float]:
    """By period: the median over its scans of the root of the noise's variance factor, which the voxels decide too."""
    factors: dict[tuple[str, str], list[float]] = {}
    for scan in audit.plan.get("scans", []):
        block = audit.scan_records.get(str(scan["entities"]), {}).get("Evenblur") or {}
        factor = block.get("noise_variance_factor")
        if factor is not None:
            factors.setdefault((scan["setup"], scan["phantom_session"]), []).append(sqrt(factor))
    return {key: round(median(values), 4) for key, values in factors.items()}


def _scans(audit: AuditInput) -> list[model.ScanRecord]:
    return [
        model.ScanRecord(
            **typed(row),
            entities=scan["entities"],
            site=site_of(audit, str(scan["setup"])),
            notes={code: str(note) for code, note in (scan.get("notes") or {}).items() if note},
        )
        for scan, row in zip(audit.plan.get("scans", []), scans_rows(audit), strict=True)
    ]


def _phantoms(audit: AuditInput) -> list[model.PhantomRecord]:
    found = []
    for row in audit.phantoms:
        label = str(row["phantom"])
        record = audit.resolution.get(label, {})
        used = (record.get("input") or {}).get("sha256")
        found.append(
            model.PhantomRecord(
                phantom=label,
                setup=str(row["setup"]),
                site=site_of(audit, str(row["setup"])),
                phantom_session=str(row["phantom_session"]),
                kind=str(row["kind"]),
                acquired=str(row.get("acquired") or ""),
                image=str(row.get("image") or ""),
                sha256=str(used or audit.intake_phantoms.get(label, {}).get("sha256") or ""),
                in_use=not excluded(row),
                in_plane=_width(record, "in_plane"),
                axial=_width(record, "axial"),
                flags=_flags(flag_texts(record.get("flags"))),
            )
        )
    return found


def _width(record: Row, name: str) -> model.WidthRecord | None:
    width = record.get(name)
    if width is None:
        return None
    halves = halves_of((record.get("fit") or {}).get("halves"), name)
    return model.WidthRecord(
        fwhm_mm=width.get("fwhm_mm"),
        se_mm=width.get("se_mm"),
        df=width.get("df"),
        halves_mm=None if halves is None else [halves.first_mm, halves.second_mm],
        halves_difference_se_mm=None if halves is None else halves.se_mm,
    )


def _other_kinds(audit: AuditInput) -> list[model.OtherKindRecord]:
    names = ("kind", "direction", "fwhm_mm", "difference_mm", "combined_se_mm")
    return [
        model.OtherKindRecord(
            setup=entry["setup"],
            phantom_session=entry["phantom_session"],
            **{name: other.get(name) for name in names},
        )
        for entry in audit.plan.get("periods", [])
        for other in entry.get("other_kinds") or ()
    ]


def _exclusions(audit: AuditInput) -> list[model.ExclusionRecord]:
    found = []
    for what, rows in (("phantom", audit.phantoms), ("scan", audit.scans)):
        for row in rows:
            if excluded(row):
                item = str(row["phantom"]) if what == "phantom" else scan_entities(row)
                reason, by = (str(row.get(key) or "not stated") for key in ("use_reason", "decided_by"))
                setup = str(row["setup"])
                entry: dict[str, Any] = {"what": what, "item": item, "setup": setup, "site": site_of(audit, setup)}
                found.append(model.ExclusionRecord(**entry, reason=reason, decided_by=by))
    return found


def _versions(audit: AuditInput) -> list[model.VersionRecord]:
    counts = Counter(version_of(record) for record in audit.scan_records.values())
    return [model.VersionRecord(version=version, scans=count) for version, count in sorted(counts.items())]


def _methods(audit: AuditInput) -> list[model.MethodRecord]:
    found = [record.get("method") or {} for record in [*audit.resolution.values(), *audit.achieved.values()]]
    pairs = sorted({(str(method.get("name") or "unknown"), str(method.get("version") or "")) for method in found})
    return [model.MethodRecord(name=name, version=version) for name, version in pairs]
