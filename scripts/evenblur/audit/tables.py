r"""The audit's tables: rows as dictionaries of text, and their file format.

UTF-8, tab separated, one header line, `\n` ends; an empty cell is a missing value; tabs and line ends inside a cell
become spaces, so that nothing needs quoting.
"""

from collections.abc import Iterable, Mapping, Sequence
from typing import Any

from evenblur.audit.inputs import AuditInput, Row, harmonised_image
from evenblur.audit.periods import flag_texts, odd_versions, periods_of
from evenblur.printable import is_formula

SITES_COLUMNS = (
    "setup",
    "site",
    "scanner",
    "reconstruction",
    "phantom_session",
    "phantom_kinds",
    "measured_in_plane_mm",
    "measured_in_plane_se_mm",
    "measured_axial_mm",
    "measured_axial_se_mm",
    "target_in_plane_mm",
    "target_axial_mm",
    "kernel_in_plane_mm",
    "kernel_axial_mm",
    "achieved_in_plane_mm",
    "achieved_axial_mm",
    "verdict",
    "scans_accepted",
    "scans_held",
    "phantom_sha256",
    "flags",
    "quadrature_kernel_in_plane_mm",
    "quadrature_kernel_axial_mm",
    "kernel_rule",
    "resulting_in_plane_se_mm",
    "resulting_axial_se_mm",
)
SCANS_COLUMNS = (
    "subject",
    "session",
    "setup",
    "phantom_session",
    "status",
    "reasons",
    "kernel_in_plane_mm",
    "kernel_axial_mm",
    "voxel_mm",
    "frames",
    "input",
    "input_sha256",
    "output",
    "output_sha256",
    "total_before",
    "total_after",
    "smoothing_version",
    "days_from_phantom",
    "flags",
)


def number(value: float | None, *, decimals: int = 4) -> str:
    """A number with at most this many decimals, without trailing zeros; empty for None.

    >>> number(4.25), number(7.0), number(None), number(-0.00001)
    ('4.25', '7', '', '0')
    """
    if value is None:
        return ""
    text = f"{value:.{decimals}f}"
    text = text.rstrip("0").rstrip(".") if "." in text else text
    return "0" if text == "-0" else text


def total(value: float | None) -> str:
    """A total with ten significant digits, enough to see a change of one in a million; empty for None.

    >>> total(1234567.891234), total(None)
    ('1234567.891', '')
    """
    return "" if value is None else f"{value:.10g}"


def one_line(value: Any) -> str:
    r"""Any value as text: one line without tabs; empty for None.

    >>> one_line("two\nlines"), one_line(None)
    ('two lines', '')
    """
    return "" if value is None else " ".join(str(value).split())


def cell(value: Any) -> str:
    """Any value as the text of one cell: one line, and nothing that a spreadsheet takes for a formula.

    Text that begins like a formula gets an apostrophe before it. Numbers and labels stay as they are.

    >>> cell("=1+1"), cell(-0.5)
    ("'=1+1", '-0.5')
    """
    text = one_line(value)
    return f"'{text}" if is_formula(text) else text


def table_text(columns: Sequence[str], rows: Iterable[Mapping[str, Any]]) -> str:
    r"""A table as text: header line, then one line a row.

    Raises
    ------
    KeyError
        If a row lacks a column.

    >>> table_text(["a", "b"], [{"a": 1, "b": None}])
    'a\tb\n1\t\n'
    """
    lines = ["\t".join(columns)]
    lines += ["\t".join(cell(row[column]) for column in columns) for row in rows]
    return "\n".join(lines) + "\n"


def sites_rows(audit: AuditInput) -> list[dict[str, str]]:
    """One row a period, in the plan's order; keys are `SITES_COLUMNS`."""
    rows = []
    for period in periods_of(audit):
        row = {
            "setup": period.setup,
            "site": period.site,
            "scanner": period.scanner,
            "reconstruction": period.reconstruction,
            "phantom_session": period.phantom_session,
            "phantom_kinds": ";".join(period.kinds),
            "verdict": period.verdict,
            "scans_accepted": str(period.accepted),
            "scans_held": str(period.held),
            "phantom_sha256": ";".join(period.hashes),
            "flags": ";".join(period.flags),
            "kernel_rule": period.rule,
        }
        for name, side in (("in_plane", period.in_plane), ("axial", period.axial)):
            row |= {
                f"measured_{name}_mm": number(side.facts.measured_mm),
                f"measured_{name}_se_mm": number(side.se_mm),
                f"target_{name}_mm": number(side.facts.target_mm),
                f"kernel_{name}_mm": number(side.kernel_mm),
                f"achieved_{name}_mm": number(side.facts.achieved_mm),
                f"quadrature_kernel_{name}_mm": number(side.quadrature_mm),
                f"resulting_{name}_se_mm": number(side.resulting_se_mm),
            }
        rows.append(row)
    return rows


def scan_flags(audit: AuditInput, scan: Row) -> dict[str, str]:
    """Flags of one scan and their sentences: those of its intake, then those of its smoothing."""
    name = scan["entities"]
    flags = flag_texts(audit.intake_scans.get(name, {}).get("flags"))
    flags |= flag_texts(scan.get("flags"))
    return flags | flag_texts((audit.scan_records.get(name, {}).get("Evenblur") or {}).get("flags"))


def scans_rows(audit: AuditInput) -> list[dict[str, str]]:
    """One row a scan, in the plan's order; keys are `SCANS_COLUMNS`."""
    odd = odd_versions(audit)
    return [_scan_row(audit, scan, scan["entities"] in odd) for scan in audit.plan.get("scans", [])]


def _scan_row(audit: AuditInput, scan: Row, odd: bool) -> dict[str, str]:
    name = scan["entities"]
    made = audit.scan_records.get(name, {}).get("Evenblur") or {}
    intake = audit.intake_scans.get(name, {})
    kernel, output = made.get("kernel") or {}, made.get("output") or {}
    flags = [*scan_flags(audit, scan), *(["mixed_versions"] if odd else [])]
    return {
        "subject": one_line(scan["subject"]),
        "session": one_line(scan["session"]),
        "setup": one_line(scan["setup"]),
        "phantom_session": one_line(scan.get("phantom_session")),
        "status": scan["status"],
        "reasons": ";".join(scan.get("reasons") or ()),
        "kernel_in_plane_mm": number(kernel.get("in_plane_mm")),
        "kernel_axial_mm": number(kernel.get("axial_mm")),
        "voxel_mm": ";".join(number(size) for size in made.get("voxel_mm") or intake.get("voxel_mm") or ()),
        "frames": one_line(made.get("frames") or intake.get("frames")),
        "input": one_line(scan.get("image")),
        "input_sha256": one_line(scan.get("sha256") or intake.get("sha256")),
        "output": harmonised_image(scan, settings=audit.settings) if made else "",
        "output_sha256": one_line(output.get("sha256")),
        "total_before": total(made.get("total_before_ml")),
        "total_after": total(made.get("total_after_ml")),
        "smoothing_version": one_line(made.get("smoothing_version")),
        "days_from_phantom": one_line(scan.get("days_from_phantom")),
        "flags": ";".join(dict.fromkeys(flags)),
    }
