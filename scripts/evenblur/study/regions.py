"""The optional table of regions: whose means are compared between sites before and after harmonisation."""

import re
from typing import Any, Literal

from pydantic import Field, model_validator

from evenblur.study.rows import BidsLabel, Label, PositiveMm, Row, ScanRow, _number
from evenblur.study.settings import relative_path

PLACEHOLDERS = ("subject", "session", "run", "tracer", "setup")


def _numbers(text: str) -> tuple[float, ...]:
    return tuple(_number(part.strip()) for part in text.split(";"))


class RegionRow(Row):
    """One region of the scans: a label of an image, a mask, or a sphere. Rows of one name are taken together."""

    region: Label = Field(description="Name of the region.")
    image: str | None = Field(
        None,
        description=(
            "Label image or mask, relative to the study folder; `{subject}`, `{session}`, `{run}`, `{tracer}` and "
            "`{setup}` stand for the scan's own. Without them it serves all scans, which must share its space."
        ),
    )
    value: int | None = Field(None, description="Label that marks the region in the image; every one but 0 if empty.")
    centre_mm: str | None = Field(None, description="Middle of a sphere in the scan's own space, `x;y;z` in mm.")
    diameter_mm: PositiveMm | None = Field(None, description="Diameter of the sphere, mm.")
    reference: Literal["yes", "no"] = Field(
        "no", description="`yes`: the other regions of a scan are divided by this one before sites are compared."
    )
    subject: BidsLabel | None = Field(None, description="The row serves this subject only.")
    session: BidsLabel | None = Field(None, description="Only scans of that session are served by the row.")

    @model_validator(mode="before")
    @classmethod
    def _whole_value(cls, values: Any) -> Any:
        if isinstance(values, dict) and re.fullmatch(r"\d+", str(values.get("value", ""))):
            return {**values, "value": int(values["value"])}
        return values

    @model_validator(mode="after")
    def _one_kind(self) -> "RegionRow":
        if (self.image is None) == (self.centre_mm is None):
            raise ValueError("a region has either an image or centre_mm with diameter_mm")
        if self.image is not None:
            unknown = set(re.findall(r"\{([^{}]*)\}", self.image)) - set(PLACEHOLDERS)
            if unknown:
                raise ValueError(f"`{{{sorted(unknown)[0]}}}` is unknown in image; known: {', '.join(PLACEHOLDERS)}")
            plain = re.sub(r"\{[^{}]*\}", "x", self.image)
            if any(ord(sign) < 32 or sign in "{}" for sign in plain) or plain.startswith("-"):
                raise ValueError("image has no control characters and no lone braces, and begins with no hyphen")
            relative_path(plain)
        elif self.diameter_mm is None or len(_numbers(self.centre_mm or "")) != 3:
            raise ValueError("a sphere has centre_mm as `x;y;z` and a diameter_mm")
        return self

    def serves(self, scan: ScanRow) -> bool:
        """Whether the row is about this scan."""
        return self.subject in (None, scan.subject) and self.session in (None, scan.session)

    def image_of(self, scan: ScanRow) -> str | None:
        """The image with the scan's own labels in the place of the words in braces; None for a sphere."""
        if self.image is None:
            return None
        name = self.image
        for word in PLACEHOLDERS:
            name = name.replace(f"{{{word}}}", str(getattr(scan, word) or ""))
        return name

    def place(self, scan: ScanRow) -> dict[str, Any]:
        """Where the region lies in a scan, as plain values."""
        if self.image is not None:
            return {"region": self.region, "image": self.image_of(scan), "value": self.value}
        centre = list(_numbers(self.centre_mm or ""))
        return {"region": self.region, "centre_mm": centre, "diameter_mm": self.diameter_mm}


OPTIONAL_TABLES: dict[str, type[Row]] = {"regions": RegionRow}
"""Tables that a study may leave out."""
