"""One view of each period for tables, queries and report: its facts, verdict and flags."""

from collections import Counter
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import Any

from evenblur.audit.inputs import AuditInput, Row, accepted
from evenblur.audit.verdicts import DirectionFacts, period_verdict, resulting_se

DIRECTIONS = ("in_plane", "axial")


@dataclass(frozen=True)
class Direction:
    """One direction of a period, in mm; None where there is no value. `se_mm` includes the repeatability."""

    facts: DirectionFacts
    se_mm: float | None
    kernel_mm: float | None
    quadrature_mm: float | None
    resulting_se_mm: float | None


@dataclass(frozen=True)
class Period:
    """A period as the audit sees it. `flags` maps each code to its sentence, in the order of the records."""

    setup: str
    phantom_session: str
    site: str
    scanner: str
    reconstruction: str
    phantoms: tuple[str, ...]
    kinds: tuple[str, ...]
    in_plane: Direction
    axial: Direction
    status: str
    rule: str
    verdict: str
    accepted: int
    held: int
    hashes: tuple[str, ...]
    flags: Mapping[str, str]

    @property
    def name(self) -> str:
        """The period's short name, as in the file names of its records."""
        return f"{self.setup}.{self.phantom_session}"


def flag_texts(flags: Iterable[Any] | None) -> dict[str, str]:
    """Codes and sentences of a record's flags: each code once, its different sentences joined.

    >>> flag_texts([{"code": "a", "text": "one"}, {"code": "a", "text": "two"}, "b"])
    {'a': 'one; two', 'b': ''}
    """
    found: dict[str, dict[str, None]] = {}
    for flag in flags or []:
        code, text = (flag, "") if isinstance(flag, str) else (str(flag["code"]), str(flag.get("text") or ""))
        found.setdefault(code, {}).update({text: None} if text else {})
    return {code: "; ".join(texts) for code, texts in found.items()}


def setup_rows(audit: AuditInput) -> dict[str, Row]:
    """The setups' rows by label."""
    return audit.by_setup


def site_of(audit: AuditInput, setup: str) -> str:
    """The site of a setup; empty where the table does not know the setup."""
    return str(setup_rows(audit).get(setup, {}).get("site") or "")


def version_of(record: Row) -> str:
    """What made a scan's record, as one line: the smoothing code, then the libraries by name."""
    block = record.get("Evenblur") or {}
    libraries = [f"{name} {version}" for name, version in sorted((block.get("versions") or {}).items())]
    return ", ".join([str(block.get("smoothing_version") or "unknown"), *libraries])


def odd_versions(audit: AuditInput) -> set[str]:
    """Scans whose record was made by other versions than most records; empty when all agree.

    >>> odd_versions(AuditInput({}, (), (), (), {"scans": []}))
    set()
    """
    found = {s["entities"]: version_of(audit.scan_records[s["entities"]]) for s in _recorded(audit)}
    counts = Counter(found.values())
    usual = max(sorted(counts), key=lambda version: counts[version], default="")
    return {name for name, version in found.items() if version != usual}


def _recorded(audit: AuditInput) -> list[Row]:
    return [scan for scan in accepted(audit.plan) if scan["entities"] in audit.scan_records]


def periods_of(audit: AuditInput) -> list[Period]:
    """All periods, in the plan's order."""
    rows, odd = setup_rows(audit), odd_versions(audit)
    scans: dict[tuple[str, Any], list[Row]] = {}
    for scan in audit.plan.get("scans", []):
        scans.setdefault((scan["setup"], scan.get("phantom_session")), []).append(scan)
    found = []
    for entry in audit.plan.get("periods", []):
        members = scans.get((str(entry["setup"]), str(entry["phantom_session"])), [])
        found.append(_period(audit, entry, rows.get(str(entry["setup"]), {}), members, odd))
    return found


def _period(audit: AuditInput, entry: Row, row: Row, members: list[Row], odd: set[str]) -> Period:
    setup, session = str(entry["setup"]), str(entry["phantom_session"])
    phantoms = tuple(str(label) for label in entry.get("phantoms") or ())
    resolution = [audit.resolution[label] for label in phantoms if label in audit.resolution]
    in_plane, axial = (_direction(audit, entry, direction) for direction in DIRECTIONS)
    status = str(entry["status"])
    flags = flag_texts(entry.get("flags"))
    for record in [*resolution, audit.achieved.get((setup, session), {})]:
        flags = {**flag_texts(record.get("flags")), **flags}
    if any(scan["entities"] in odd for scan in members):
        flags = {**flags, "mixed_versions": "Some scans were smoothed by other program versions than the rest."}
    return Period(
        setup=setup,
        phantom_session=session,
        site=str(row.get("site") or ""),
        scanner=str(row.get("scanner") or ""),
        reconstruction=str(row.get("reconstruction") or ""),
        phantoms=phantoms,
        kinds=tuple(dict.fromkeys(str(record["kind"]) for record in resolution)),
        in_plane=in_plane,
        axial=axial,
        status=status,
        rule=str((entry.get("kernel") or {}).get("rule") or ""),
        verdict=period_verdict(
            [in_plane.facts, axial.facts], status=status, tolerance_mm=audit.settings["tolerance"]["achieved_mm"]
        ),
        accepted=sum(scan["status"] == "accepted" for scan in members),
        held=sum(scan["status"] == "held" for scan in members),
        hashes=tuple(h for h in (_phantom_hash(audit, label) for label in phantoms) if h),
        flags=flags,
    )


def _phantom_hash(audit: AuditInput, label: str) -> str:
    used = (audit.resolution.get(label, {}).get("input") or {}).get("sha256")
    return str(used or audit.intake_phantoms.get(label, {}).get("sha256") or "")


def _direction(audit: AuditInput, entry: Row, direction: str) -> Direction:
    measured, statistical = entry.get("measured") or {}, entry.get("statistical") or {}
    width = audit.achieved.get((str(entry["setup"]), str(entry["phantom_session"])), {}).get(direction) or {}
    facts = DirectionFacts(
        measured_mm=measured.get(f"{direction}_mm"),
        statistical_se_mm=statistical.get(f"{direction}_se_mm"),
        target_mm=audit.plan.get("target", {}).get(f"{direction}_mm"),
        achieved_mm=width.get("fwhm_mm"),
        source=(entry.get("source") or {}).get(direction),
    )
    se_mm = measured.get(f"{direction}_se_mm")
    return Direction(
        facts=facts,
        se_mm=se_mm,
        kernel_mm=(entry.get("kernel") or {}).get(f"{direction}_mm"),
        quadrature_mm=(entry.get("quadrature") or {}).get(f"{direction}_mm"),
        resulting_se_mm=resulting_se(measured_mm=facts.measured_mm, se_mm=se_mm, target_mm=facts.target_mm),
    )
