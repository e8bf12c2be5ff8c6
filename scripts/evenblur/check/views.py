"""The audit's other files say what its tables say: spreadsheets, audit.json, each site's own record, the history."""

import csv
import hashlib
import io
from pathlib import Path
from typing import Any

from evenblur.check.findings import DisagreementError, entry, read_json, read_table, same_text, table_cell
from evenblur.check.handover import DIRECTIONS, Handover

HISTORY_HEADER = "date\titem\twhat\told\tnew\treason\tprevious_sha256"


def check_spreadsheets(bag: Handover) -> int:
    """Compare sites.csv and scans.csv with the tables of the same names."""
    count = 0
    for name in ("sites", "scans"):
        rows = read_table(bag.data, f"results/audit/{name}.tsv")
        where = f"results/audit/{name}.csv"
        try:
            text = (bag.data / where).read_bytes().decode()
        except FileNotFoundError:
            raise DisagreementError(where, "is not there") from None
        header, *lines = csv.reader(io.StringIO(text, newline=""))
        same_text(f"{where}, rows", len(lines), len(rows))
        for row, cells in zip(rows, lines, strict=True):
            same_text(f"{where}, columns", " ".join(header), " ".join(row))
            for (column, value), cell in zip(row.items(), cells, strict=True):
                # One apostrophe in front keeps a spreadsheet from running a cell.
                same_text(f"{where}, {row['setup']}, {column}", table_cell(cell.removeprefix("'")), value)
                count += 1
    return count


def check_audit_record(bag: Handover) -> int:
    """Compare audit.json with the tables, and each site's own record with audit.json."""
    where = "results/audit/audit.json"
    record = read_json(bag.data, where)
    count = 0
    for name, table in (("periods", "sites.tsv"), ("scans", "scans.tsv"), ("queries", "queries.tsv")):
        rows = read_table(bag.data, f"results/audit/{table}")
        same_text(f"{where}, {name} against {table}", len(record[name]), len(rows))
        for part, row in zip(record[name], rows, strict=True):
            count += _same_row(f"{where}, {name} against {table}", part, row)
    for direction in ("in_plane_mm", "axial_mm"):
        same_text(f"{where}, target {direction}", record["target"][direction], bag.plan["target"][direction])
    summary = record["summary"]
    statuses = [scan["status"] for scan in bag.plan["scans"]]
    same_text(f"{where}, scans_accepted", summary["scans_accepted"], statuses.count("accepted"))
    same_text(f"{where}, scans_held", summary["scans_held"], statuses.count("held"))
    if record["settings"] != bag.settings:
        raise DisagreementError(f"{where}, settings", "differ from those of study.json")
    count += _check_phantoms(bag, record["phantoms"])
    for site in dict.fromkeys(row["site"] for row in bag.setups):
        count += _check_site(bag, record, site)
    return count


def _same_row(where: str, part: dict[str, Any], row: dict[str, str]) -> int:
    for column, cell in row.items():
        value = part[column]
        if isinstance(value, list):
            same = [_number(text) for text in cell.split(";")] if cell else []
            if [_number(str(item)) for item in value] != same:
                raise DisagreementError(f"{where}, {column}", f"says {value}, and its table says {cell}")
        elif value is None or isinstance(value, str):
            same_text(f"{where}, {column}", table_cell(value or ""), cell)
        elif _number(cell) != value:
            raise DisagreementError(f"{where}, {column}", f"says {value}, and its table says {cell}")
    return len(row)


def _number(text: str) -> float | str:
    try:
        return float(text)
    except ValueError:
        return text


def _check_phantoms(bag: Handover, phantoms: list[dict[str, Any]]) -> int:
    where = "results/audit/audit.json, phantoms"
    same_text(where, ", ".join(p["phantom"] for p in phantoms), ", ".join(row["phantom"] for row in bag.phantoms))
    for part in phantoms:
        for direction in DIRECTIONS:
            width = entry(bag.resolution, part["phantom"], direction) or {}
            for name in ("fwhm_mm", "se_mm", "df"):
                found = entry(part, direction, name)
                same_text(f"{where}, {part['phantom']}, {direction} {name}", found, width.get(name))
    return 3 * len(DIRECTIONS) * len(phantoms)


def _check_site(bag: Handover, record: dict[str, Any], site: str) -> int:
    """Every number, verdict and hash of a site's own record; its words may leave out what is another site's."""
    where = f"results/audit/sites/{site}.json"
    own, count = read_json(bag.data, where), 0
    for name in ("in_plane_mm", "axial_mm"):
        same_text(f"{where}, target {name}", own["target"][name], record["target"][name])
    same_text(f"{where}, tolerance_mm", own["tolerance_mm"], bag.settings["tolerance"]["achieved_mm"])
    same_text(f"{where}, repeatability_mm", own["repeatability_mm"], bag.settings["phantoms"]["repeatability_mm"])
    for name in ("periods", "scans", "phantoms"):
        expected = [part for part in record[name] if part["site"] == site]
        same_text(f"{where}, {name}", len(own[name]), len(expected))
        for part, whole in zip(own[name], expected, strict=True):
            same_text(f"{where}, {name}, numbers", numbers(part), numbers(whole))
            words = ("verdict", "status", "subject", "session", "setup", "phantom_session", "phantom", "acquired")
            for column in (column for column in whole if column in words or column.endswith("sha256")):
                same_text(f"{where}, {name}, {column}", part[column], whole[column])
            count += len(whole)
    return count


def numbers(value: Any) -> list[float | bool]:
    """All numbers of a record, in its order.

    >>> numbers({"a": 1.5, "b": ["x", 2, {"c": None}]})
    [1.5, 2]
    """
    if isinstance(value, int | float):
        return [value]
    parts = value.values() if isinstance(value, dict) else value if isinstance(value, list) else ()
    return [number for part in parts for number in numbers(part)]


def check_history(bag: Handover) -> int:
    """Check that each line of history.tsv holds the hash of the one before, and that none is missing at the end."""
    name = "history.tsv"
    heads = {where: read_json(bag.data, where) for where in ("results/audit/history.json", "results/audit/audit.json")}
    heads["results/audit/audit.json"] = heads["results/audit/audit.json"].get("history") or {}
    if not (bag.data / name).is_file():
        raise DisagreementError(name, "is not in the bag")
    lines = _whole_lines(bag.data / name)
    before = hashlib.sha256(HISTORY_HEADER.encode()).hexdigest()
    for number, line in enumerate(lines, start=1):
        cells = line.split("\t")
        if len(cells) != HISTORY_HEADER.count("\t") + 1 or cells[-1] != before:
            raise DisagreementError(f"{name}, line {number}", "does not hold the hash of the line before it")
        before = hashlib.sha256(line.encode()).hexdigest()
    for where, head in heads.items():
        if (head.get("lines"), head.get("sha256")) != (len(lines), before):
            what = f"{where} says that it has {head.get('lines')} lines ending in {str(head.get('sha256'))[:12]}"
            raise DisagreementError(name, f"has {len(lines)} lines ending in {before[:12]}, and {what}")
    return len(lines)


def told_alterations(bag: Handover) -> int:
    """Lines of history.tsv in which a run told that somebody had altered the file before."""
    path = bag.data / "history.tsv"
    if not path.is_file():
        return 0
    return sum(line.split("\t")[2] == "disagreement" for line in _whole_lines(path))


def _whole_lines(path: Path) -> list[str]:
    lines = path.read_bytes().decode(errors="replace").split("\n")
    if lines[0] != HISTORY_HEADER or lines[-1] != "":
        raise DisagreementError(path.name, "does not begin with its header and end with a whole line")
    return lines[1:-1]
