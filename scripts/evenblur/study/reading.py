"""Read a study folder: study.yaml and the three tables, checked as a whole before any work."""

import csv
import difflib
import io
import unicodedata
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from pydantic import BaseModel, ValidationError

from evenblur.images.plain_files import check_plain_file
from evenblur.study.problems import Problem, StudyError, nearest
from evenblur.study.regions import RegionRow
from evenblur.study.rows import FILLING, TABLES, PhantomRow, Row, ScanRow, SetupRow
from evenblur.study.settings import Settings
from evenblur.study.yaml_reading import parse_yaml

STUDY_FILE = "config/study.yaml"

LARGEST_FILE = 64 << 20
"""A table beyond this is none: a hundred thousand scans take a third of it."""


@dataclass(frozen=True)
class Study:
    """A study whose files agree with each other."""

    settings: Settings
    setups: list[SetupRow]
    phantoms: list[PhantomRow]
    scans: list[ScanRow]
    by_setup: dict[str, SetupRow] = field(default_factory=dict)
    by_phantom: dict[str, PhantomRow] = field(default_factory=dict)
    by_entities: dict[str, ScanRow] = field(default_factory=dict)
    regions: list[RegionRow] = field(default_factory=list)


def load_study(study_dir: Path) -> Study:
    """Read and check a study folder.

    Raises
    ------
    StudyError
        With every problem in every file, in the order of the files and their rows.
    """
    problems: list[Problem] = []
    settings = _read_settings(study_dir, problems)
    if settings is None:
        raise StudyError(problems)
    tables: dict[str, list[tuple[int, Any]]] = {}
    for name, model in TABLES.items():
        path = getattr(settings.tables, name)
        tables[name] = _read_table(study_dir, path, model, problems)
    regions = _read_regions(study_dir, settings, problems)
    _check_together(settings, tables, problems)
    if problems:
        raise StudyError(problems)
    setups, phantoms, scans = ([row for _, row in tables[name]] for name in ("setups", "phantoms", "scans"))
    return Study(
        settings=settings,
        setups=setups,
        phantoms=phantoms,
        scans=scans,
        by_setup={row.setup: row for row in setups},
        by_phantom={row.phantom: row for row in phantoms},
        by_entities={row.entities: row for row in scans},
        regions=regions,
    )


def _read_regions(study_dir: Path, settings: Settings, problems: list[Problem]) -> list[RegionRow]:
    """The table of regions; a study without one at the usual place has none."""
    name = settings.tables.regions
    usual = type(settings.tables).model_fields["regions"].default
    if name == usual and not (study_dir / name).exists():
        return []
    return [row for _, row in _read_table(study_dir, name, RegionRow, problems)]


def _read_text(study_dir: Path, name: str, problems: list[Problem]) -> str | None:
    path = study_dir / name
    try:
        check_plain_file(path)
        if path.stat().st_size > LARGEST_FILE:
            found = f"the file is larger than {LARGEST_FILE >> 20} MiB"
            problems.append(Problem(name, None, None, found, "name the right file"))
            return None
        return path.read_text(encoding="utf-8-sig")
    except FileNotFoundError:
        problems.append(Problem(name, None, None, "the file is missing", "add it, or correct its path in study.yaml"))
    except UnicodeDecodeError:
        problems.append(Problem(name, None, None, "the text is not UTF-8", "save it as UTF-8"))
    except OSError as error:
        problems.append(Problem(name, None, None, f"cannot be read ({error.strerror})", "mend its permissions"))
    return None


def _read_settings(study_dir: Path, problems: list[Problem]) -> Settings | None:
    text = _read_text(study_dir, STUDY_FILE, problems)
    if text is None:
        return None
    try:
        values = parse_yaml(text)
    except ValueError as error:
        problems.append(Problem(STUDY_FILE, None, None, str(error), "correct the line"))
        return None
    if not isinstance(values, dict):
        problems.append(Problem(STUDY_FILE, None, None, "holds no keys", "start with `study: {title: ...}`"))
        return None
    try:
        # A block without a value (`target:`) means its defaults.
        return Settings.model_validate({name: value for name, value in values.items() if value is not None})
    except ValidationError as error:
        problems.extend(_settings_problem(part) for part in error.errors())
        return None


def _settings_problem(error: Any) -> Problem:
    location = [str(part) for part in error["loc"]]
    key = ".".join(location)
    kind = error["type"]
    if kind == "extra_forbidden":
        known = _known_keys(Settings, location[:-1])
        return Problem(STUDY_FILE, None, key, "the key is unknown", nearest(location[-1], known))
    if kind == "missing":
        return Problem(STUDY_FILE, None, key, "the key is missing", "add it")
    return Problem(STUDY_FILE, None, key, _found(error), _mend(error))


def _known_keys(model: type[BaseModel], location: list[str]) -> list[str]:
    for name in location:
        annotation: Any = model.model_fields[name].annotation
        model = annotation
    return list(model.model_fields)


def _found(error: Any) -> str:
    value = error.get("input")
    shown = "" if isinstance(value, dict | list) or value is None else f"found `{value}`"
    if error["type"] == "value_error":
        reason = str(error["ctx"]["error"])
        return f"{shown}: {reason}" if shown else reason
    return shown or f"found {'nothing' if value is None else 'a ' + type(value).__name__}"


def _mend(error: Any) -> str:
    if error["type"] in ("model_type", "dict_type", "model_attributes_type"):
        block = str(error["loc"][-1]) if error["loc"] else "study"
        example = {"study": "title: My study", "target": "choose: coarsest"}.get(block, "key: value")
        return f"write it as keys, as `{block}: {{{example}}}`"
    if error["type"] == "value_error":
        return "correct it"
    if error["type"] == "literal_error":
        expected = error["ctx"]["expected"].replace("'", "")
        allowed = expected.replace(" or ", ", ").split(", ")
        value = str(error.get("input"))
        return f"allowed: {', '.join(allowed)}" + (f" ({nearest(value, allowed)})" if value else "")
    message = error["msg"][0].lower() + error["msg"][1:]
    return message.replace("input should be", "give").replace("a valid number", "a number")


def _read_table(study_dir: Path, name: str, model: type[Row], problems: list[Problem]) -> list[tuple[int, Any]]:
    text = _read_text(study_dir, name, problems)
    if text is None:
        return []
    rows, lines = [], csv.reader(io.StringIO(text), delimiter="\t")
    try:
        header = [cell.strip() for cell in next(lines, [])]
        while header and not header[-1]:  # empty columns at the end, as spreadsheets leave them
            header.pop()
        if len(header) == 1 and any(sign in header[0] for sign in ",; "):
            found = "there are no tabs between the columns"
            problems.append(Problem(name, 1, None, found, "save the table as tab-separated text"))
            return []
        if not _check_header(name, header, model, problems):
            return []
        for cells in lines:
            if not any(cell.strip() for cell in cells):
                continue
            row = _read_row(name, lines.line_num, header, cells, model, problems)
            if row is not None:
                rows.append((lines.line_num, row))
    except csv.Error as error:
        problems.append(Problem(name, lines.line_num, None, f"not a table ({error})", "save it as tab-separated text"))
    return rows


def _check_header(name: str, header: list[str], model: type[Row], problems: list[Problem]) -> bool:
    before = len(problems)
    for column in sorted({column for column in header if header.count(column) > 1}):
        shown = f"`{column}`" if column else "an empty name"
        problems.append(Problem(name, 1, column, f"the column {shown} stands twice", "leave one"))
    fields = model.model_fields
    needed = [column for column, known in fields.items() if known.is_required()]
    for column in needed:
        if column not in header:
            others = [found for found in header if found not in fields]
            hint = nearest(column, others) if others else "add it"
            tabs = "" if len(header) > 1 else " (are there tabs between the columns?)"
            mend = f"add it{tabs}" if "did you" not in hint else hint.replace("did you mean", "rename")
            problems.append(Problem(name, 1, column, "the column is missing", mend.rstrip("?")))
    for column in header:
        # A further column is a note; one that is nearly a known name is taken for a slip.
        close = nearest(column, [known for known in fields if known not in header]) if column else ""
        if column and column not in fields and "did you mean" in close and _is_slip(column, close.split("`")[1]):
            problems.append(Problem(name, 1, column, "the column is unknown", close))
    return len(problems) == before


def _is_slip(written: str, known: str) -> bool:
    plain, other = (text.lower().replace(" ", "_").replace("-", "_") for text in (written, known))
    if len(plain) != len(other):
        return difflib.SequenceMatcher(None, plain, other).ratio() > 0.9
    return sum(a != b for a, b in zip(plain, other, strict=True)) <= 1


def _read_row(
    name: str, line: int, header: list[str], cells: list[str], model: type[Row], problems: list[Problem]
) -> Row | None:
    if any(cell.strip() for cell in cells[len(header) :]):
        found = f"{len(cells)} cells under {len(header)} columns"
        problems.append(Problem(name, line, None, found, "take out the tab that is too many"))
        return None
    values = {}
    for column, cell in zip(header, cells, strict=False):
        text = cell.strip()
        if any(unicodedata.category(sign) in ("Cc", "Cs") for sign in text):
            # A quotation mark that is never closed makes one cell of all the rows after it.
            several = "\n" in text or "\t" in text
            found = (
                "the cell holds a tab or line end between quotation marks" if several else "holds control characters"
            )
            mend = "take out the quotation mark, or close it in the same cell" if several else "type the cell anew"
            problems.append(Problem(name, line, column, found, mend))
            return None
        if text and column and text.lower() not in ("n/a",):
            values[column] = text
    try:
        return model.model_validate(values)
    except ValidationError as error:
        for part in error.errors():
            column = str(part["loc"][0]) if part["loc"] else _column_of(part)
            if part["type"] == "missing":
                problems.append(Problem(name, line, column, "the cell is empty", FILLING.get(column, "fill it")))
            else:
                problems.append(Problem(name, line, column, _found(part), _mend(part)))
        return None


def _column_of(error: Any) -> str:
    message = str(error.get("ctx", {}).get("error", ""))
    return next((name for name in ("use_reason", "declared_source", "details", "centre_mm") if name in message), "row")


def _check_together(settings: Settings, tables: dict[str, list[tuple[int, Any]]], problems: list[Problem]) -> None:
    files = settings.tables
    _check_unique(files.setups, tables["setups"], "setup", problems)
    _check_unique(files.phantoms, tables["phantoms"], "phantom", problems)
    _check_unique(files.scans, tables["scans"], "entities", problems)
    _check_spelling(files.setups, tables["setups"], "site", problems)
    _check_spelling(files.phantoms, tables["phantoms"], "phantom_session", problems)
    setups = {row.setup for _, row in tables["setups"]}
    if setups:
        for table in ("phantoms", "scans"):
            for line, row in tables[table]:
                if row.setup not in setups:
                    found = f"found `{row.setup}`, which {files.setups} does not list"
                    problems.append(Problem(getattr(files, table), line, "setup", found, nearest(row.setup, setups)))
    # Without scans a centre can still check, measure and plan its phantoms; without setups there is nothing to say.
    if not tables["setups"] and not problems:
        problems.append(Problem(files.setups, None, None, "the table has no rows", "add them"))


def _check_unique(file: str, rows: list[tuple[int, Any]], column: str, problems: list[Problem]) -> None:
    seen: dict[str, int] = {}
    for line, row in rows:
        label = getattr(row, column)
        first = seen.setdefault(label.lower(), line)
        if first != line:
            shown, mend = column, "give every row its own (upper and lower case count as the same)"
            if column == "entities":
                shown, mend = "subject, session, tracer, run", "tell them apart by `run`"
            problems.append(Problem(file, line, shown, f"`{label}` stands in row {first} already", mend))


def _check_spelling(file: str, rows: list[tuple[int, Any]], column: str, problems: list[Problem]) -> None:
    spelled: dict[tuple[str, str], str] = {}
    for line, row in rows:
        label = getattr(row, column)
        owner = getattr(row, "setup", "") if column == "phantom_session" else ""
        usual = spelled.setdefault((owner, label.lower()), label)
        if usual != label:
            problems.append(Problem(file, line, column, f"found `{label}`, elsewhere `{usual}`", "spell it one way"))


def resolved(study: Study) -> dict[str, Any]:
    """The study as plain values (dates as text), the form that its digest is taken of and that the audit shows."""
    return {
        "settings": study.settings.model_dump(mode="json"),
        "setups": [row.model_dump(mode="json") for row in study.setups],
        "phantoms": [row.model_dump(mode="json") for row in study.phantoms],
        "scans": [row.model_dump(mode="json") for row in study.scans],
    }
