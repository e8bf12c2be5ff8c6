"""The study's models as documents: JSON schemas for editors, key and column tables for readers."""

import json
from typing import Any

from pydantic import BaseModel

from evenblur.audit.model import AuditRecord, SiteRecord
from evenblur.codes import FLAGS, HOLDS, Code
from evenblur.study.regions import OPTIONAL_TABLES
from evenblur.study.rows import TABLES
from evenblur.study.settings import Settings

DIALECT = "https://json-schema.org/draft/2020-12/schema"

START, END = "<!-- {name}: written by scripts/write_documents.py -->", "<!-- end of {name} -->"


def schema_files() -> dict[str, str]:
    """JSON schemas by file name: of study.yaml, of one row of each table, of the audit's and the sites' records."""
    models: dict[str, type[BaseModel]] = {"study": Settings, **TABLES, **OPTIONAL_TABLES}
    schemas = {name: model.model_json_schema() for name, model in models.items()}
    # What the audit writes has every key; what people write may leave out those with defaults.
    for name, written in (("audit", AuditRecord), ("site", SiteRecord)):
        schemas[name] = {"$schema": DIALECT, **written.model_json_schema(mode="serialization")}
    return {
        f"{name}.schema.json": json.dumps(schema, indent=2, ensure_ascii=False) + "\n"
        for name, schema in schemas.items()
    }


def fill_in(page: str) -> str:
    """A page of text with every block between the markers written anew."""
    blocks = {
        "keys": _key_table(),
        **{f"columns of {name}": _column_table(model) for name, model in {**TABLES, **OPTIONAL_TABLES}.items()},
        "hold reasons": _code_table(HOLDS),
        "flags": _code_table(FLAGS),
    }
    for name, block in blocks.items():
        start, end = START.format(name=name), END.format(name=name)
        if start in page and end in page:
            before, rest = page.split(start, 1)
            after = rest.split(end, 1)[1]
            page = f"{before}{start}\n\n{block}\n{end}{after}"
    return page


def _key_table() -> str:
    lines = ["| key | default | meaning |", "|---|---|---|"]
    _add_keys(Settings, "", lines)
    return "\n".join(lines) + "\n"


def _add_keys(model: type[BaseModel], prefix: str, lines: list[str]) -> None:
    for name, known in model.model_fields.items():
        part = known.annotation
        if isinstance(part, type) and issubclass(part, BaseModel):
            _add_keys(part, f"{prefix}{name}.", lines)
            continue
        default = "needed" if known.is_required() else f"`{_shown(known.get_default(call_default_factory=True))}`"
        lines.append(f"| `{prefix}{name}` | {default} | {known.description} |")


def _shown(value: Any) -> str:
    if value is None or isinstance(value, bool):
        return json.dumps(value)
    return ", ".join(map(str, value)) if isinstance(value, list) else str(value)


def _column_table(model: type[BaseModel]) -> str:
    lines = ["| column | needed | meaning |", "|---|---|---|"]
    for name, known in model.model_fields.items():
        needed = "yes" if known.is_required() else "no"
        lines.append(f"| `{name}` | {needed} | {known.description} |")
    return "\n".join(lines) + "\n"


def _code_table(codes: dict[str, Code]) -> str:
    lines = ["| code | what it means | what to do | who |", "|---|---|---|---|"]
    lines += [f"| `{code.code}` | {code.meaning} | {code.mend} | {code.who} |" for code in codes.values()]
    return "\n".join(lines) + "\n"
