"""The rows of the three tables: columns, meanings and limits, stated once."""

import datetime
import re
from typing import Annotated, Any, Literal

from pydantic import AfterValidator, BaseModel, BeforeValidator, ConfigDict, Field, model_validator

from evenblur.study.settings import KINDS, Date, Kind, parse_date, relative_path
from evenblur.study.yaml_reading import parse_yaml

RESERVED = "declared"

LONGEST_ENTITIES = 180
"""A file name has 255 bytes at most, and the results' names add some 50 to the entities."""
LONGEST_NOTE = f"{LONGEST_ENTITIES} signs at most with the keys between them"


def _label(value: str) -> str:
    if not re.fullmatch(r"[A-Za-z0-9-]{1,64}", value):
        raise ValueError("a label has letters, digits and hyphens only, 64 at most")
    if value.lower() == RESERVED:
        raise ValueError(f"`{RESERVED}` is reserved for periods without a phantom")
    return value


def _bids_label(value: str) -> str:
    if not re.fullmatch(r"[A-Za-z0-9]{1,64}", value):
        hint = ", without the `sub-` or `ses-` before it" if "-" in value else ""
        raise ValueError(f"a BIDS label has letters and digits only, 64 at most{hint}")
    return value


def _number(value: Any) -> Any:
    if isinstance(value, str):
        if not re.fullmatch(r"[+-]?(\d+(\.\d*)?|\.\d+)([eE][+-]?\d+)?", value):
            comma = "; the decimal sign is a point" if "," in value else ""
            raise ValueError(f"not a number{comma}")
        return float(value)
    return value


def _dates(value: Any) -> Any:
    if isinstance(value, str):
        return tuple(parse_date(part.strip()) for part in value.split(";") if part.strip())
    return value


def _path(value: str) -> str:
    if any(ord(sign) < 32 or sign in "{}" for sign in value) or value.startswith("-"):
        raise ValueError("a path has no control characters and no braces, and begins with no hyphen")
    if value[0] in "=+@":
        raise ValueError("a path that begins so is a formula to a spreadsheet; write ./ before it")
    if not [part for part in value.split("/") if part not in ("", ".", "..")]:
        raise ValueError("names no file")
    return relative_path(value)


Label = Annotated[str, AfterValidator(_label)]
BidsLabel = Annotated[str, AfterValidator(_bids_label)]
Dates = Annotated[tuple[datetime.date, ...], BeforeValidator(_dates)]
PositiveMm = Annotated[float, BeforeValidator(_number), Field(gt=0, le=50)]
ImagePath = Annotated[str, AfterValidator(_path)]
Use = Literal["yes", "no"]


class Row(BaseModel):
    """A table row; further columns are kept as notes."""

    model_config = ConfigDict(extra="allow", frozen=True)

    @property
    def notes(self) -> dict[str, str]:
        """The further columns of the row."""
        return {name: str(value) for name, value in (self.model_extra or {}).items()}


class UsedRow(Row):
    """A row that a decision can take out of use."""

    use: Use = Field("yes", description="`no` takes the row out of use; it stays in the audit.")
    use_reason: str | None = Field(None, description="Why it is out of use.")
    decided_by: str | None = Field(None, description="Who decided so.")

    @model_validator(mode="after")
    def _reasoned(self) -> "UsedRow":
        if self.use == "no" and not self.use_reason:
            raise ValueError("`use: no` needs a use_reason")
        return self


class SetupRow(Row):
    """One setup: one scanner with one reconstruction at one site."""

    setup: Label = Field(description="Label of the setup.")
    site: Label = Field(description="Label of the site.")
    scanner: str = Field("", description="The scanner, in the site's words.")
    reconstruction: str = Field("", description="The reconstruction, in the site's words.")
    declared_in_plane_mm: PositiveMm | None = Field(None, description="Declared in-plane width, mm.")
    declared_axial_mm: PositiveMm | None = Field(None, description="Declared axial width, mm.")
    declared_se_mm: PositiveMm = Field(1.0, description="Standard error of a declared width, mm.")
    declared_source: str | None = Field(None, description="Where the declared width comes from.")
    changed: Dates = Field((), description="Dates of services or upgrades, `;` between them.")

    @model_validator(mode="after")
    def _sourced(self) -> "SetupRow":
        declared = self.declared_in_plane_mm is not None or self.declared_axial_mm is not None
        if declared and not self.declared_source:
            raise ValueError("a declared width needs a declared_source")
        return self

    def declared_mm(self, direction: str) -> float | None:
        """The declared width (mm) of `in_plane` or `axial`."""
        return self.declared_in_plane_mm if direction == "in_plane" else self.declared_axial_mm


def _diameters(value: Any) -> tuple[float, ...]:
    if not isinstance(value, list) or not value:
        raise ValueError("is a list of numbers, as [10, 13, 17]")
    return tuple(_detail_number(part, 1.0, 200.0) for part in value)


def _detail_number(value: Any, least: float, most: float) -> float:
    if isinstance(value, bool) or not isinstance(value, int | float) or not least <= value <= most:
        raise ValueError(f"is a number from {least:g} to {most:g}")
    return float(value)


def _detail_time(value: Any) -> str:
    if isinstance(value, str):
        try:
            value = datetime.datetime.fromisoformat(value)
        except ValueError:
            value = None
    if not isinstance(value, datetime.datetime) or value.tzinfo is not None:
        raise ValueError("is a day and time at the site, as 2026-03-31T14:05:00")
    return value.isoformat()


def _detail_unit(value: Any) -> str:
    if value not in ("Bq/mL", "kBq/mL", "MBq/mL"):
        raise ValueError("is Bq/mL, kBq/mL or MBq/mL")
    return str(value)


SCALE_DETAILS: dict[str, Any] = {
    "true_kbq_ml": lambda v: _detail_number(v, 1e-6, 1e9),
    "reference_time": _detail_time,
    "image_time": _detail_time,
    "image_unit": _detail_unit,
}
"""Details of a uniform phantom that tell its true activity; no width depends on them."""

_DETAILS: dict[str, dict[str, Any]] = {
    "point_source": {"source_diameter_mm": lambda v: _detail_number(v, 0.0, 20.0)},
    "line_source": {"source_diameter_mm": lambda v: _detail_number(v, 0.0, 20.0)},
    "uniform_cylinder": {
        "radius_mm": lambda v: _detail_number(v, 5.0, 500.0),
        "length_mm": lambda v: _detail_number(v, 5.0, 2000.0),
        **SCALE_DETAILS,
    },
    "hot_spheres": {
        "diameters_mm": _diameters,
        "wall_mm": lambda v: _detail_number(v, 0.0, 10.0),
        "contrast": lambda v: _detail_number(v, 1.0, 1000.0),
    },
    "reference_image": {"reference": lambda v: _path(v) if isinstance(v, str) else _refuse_reference()},
}
_NEEDED = {"hot_spheres": ("diameters_mm",), "reference_image": ("reference",)}


def _refuse_reference() -> str:
    raise ValueError("is the path of a volume of relative activity")


def check_details(kind: str, details: dict[str, Any]) -> dict[str, Any]:
    """Check the `details` of a phantom kind and give them back with numbers as float.

    Raises
    ------
    ValueError
        For an unknown key (the known ones are named), a value out of range or a missing key.
    """
    known = _DETAILS[kind]
    checked = {}
    for name, value in details.items():
        if name not in known:
            raise ValueError(f"details of {kind} have no key `{name}`; known: {', '.join(sorted(known))}")
        try:
            checked[name] = known[name](value)
        except ValueError as error:
            raise ValueError(f"details: {name} {error}") from None
    for name in _NEEDED.get(kind, ()):
        if name not in checked:
            raise ValueError(f"details of {kind} need `{name}`")
    return checked


class PhantomRow(UsedRow):
    """One phantom scan."""

    phantom: Label = Field(description="Label of the phantom scan.")
    setup: Label = Field(description="The setup that it was scanned with.")
    phantom_session: Label = Field(description="Label shared by the phantom scans of a setup made together.")
    acquired: Date = Field(description="Day of the scan.")
    kind: Kind = Field(description="Kind of phantom.")
    image: ImagePath = Field(description="Image file, relative to the study folder.")
    details: dict[str, Any] = Field(default_factory=dict, description="Facts of the phantom, as YAML.")
    radionuclide: str | None = Field(None, description="Radionuclide that it was filled with, as F18.")
    valid_until: Date | None = Field(None, description="Last day that it speaks for; overrides valid_days.")

    @model_validator(mode="before")
    @classmethod
    def _read_details(cls, values: Any) -> Any:
        text = values.get("details") if isinstance(values, dict) else None
        if isinstance(text, str):
            try:
                parsed = parse_yaml(text)
            except ValueError as error:
                raise ValueError(f"details: {error}") from None
            if not isinstance(parsed, dict):
                raise ValueError("details are YAML keys and values, as {radius_mm: 100}")
            values = {**values, "details": parsed}
        return values

    @model_validator(mode="after")
    def _fitting_details(self) -> "PhantomRow":
        object.__setattr__(self, "details", check_details(self.kind, self.details))
        return self


class ScanRow(UsedRow):
    """One subject scan."""

    subject: BidsLabel = Field(description="BIDS label of the subject.")
    session: BidsLabel = Field(description="BIDS label of the session.")
    setup: Label = Field(description="The setup that it was scanned with.")
    acquired: Date = Field(description="Day of the scan.")
    image: ImagePath = Field(description="Image file, relative to the study folder.")
    run: BidsLabel | None = Field(None, description="BIDS label of the run.")
    tracer: BidsLabel | None = Field(None, description="BIDS label of the tracer.")
    radionuclide: str | None = Field(None, description="Radionuclide of the tracer, as F18.")

    @model_validator(mode="after")
    def _short_enough(self) -> "ScanRow":
        if len(self.entities) > LONGEST_ENTITIES:
            raise ValueError(f"subject, session, tracer and run are too long together for a file name: {LONGEST_NOTE}")
        return self

    @property
    def entities(self) -> str:
        """The scan's key: its BIDS entities in the standard's order."""
        parts = [f"sub-{self.subject}", f"ses-{self.session}"]
        parts += [f"trc-{self.tracer}"] if self.tracer else []
        parts += [f"run-{self.run}"] if self.run else []
        return "_".join(parts)


FILLING = {
    "setup": "write the label of a setup of the setups table",
    "site": "write the site's label",
    "phantom": "write a label of its own",
    "phantom_session": "write a label that the setup's phantom scans made together share, as p1",
    "acquired": "write the day, as 2026-03-31",
    "kind": f"write what it is: {', '.join(KINDS)}",
    "image": "write the image's path, relative to the study folder",
    "subject": "write the subject's label, as 01",
    "session": "write a label, as 1 where the subject came once",
}
"""What to do about an empty cell that is needed, by column."""

TABLES: dict[str, type[Row]] = {"setups": SetupRow, "phantoms": PhantomRow, "scans": ScanRow}
