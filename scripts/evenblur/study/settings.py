"""The settings of study.yaml: names, meanings, defaults and limits, stated once.

The JSON schema under `workflow/schemas/` and the key table of `config/README.md` are written from these models.
"""

import datetime
import re
from typing import Annotated, Any, Literal

from pydantic import AfterValidator, BaseModel, BeforeValidator, ConfigDict, Field, field_validator, model_validator

Kind = Literal["reference_image", "uniform_cylinder", "hot_spheres", "line_source", "point_source"]
KINDS: tuple[Kind, ...] = ("reference_image", "uniform_cylinder", "hot_spheres", "line_source", "point_source")


def parse_date(value: Any) -> Any:
    """A day from its text `year-month-day`; other values pass through to the type check."""
    if isinstance(value, str):
        if not re.fullmatch(r"[0-9]{4}-[0-9]{2}-[0-9]{2}", value):
            raise ValueError(f"a date is written year-month-day, as 2026-03-31{_guess(value)}")
        try:
            return datetime.date.fromisoformat(value)
        except ValueError:
            raise ValueError("there is no such day in the calendar") from None
    return value


def _guess(value: str) -> str:
    """What a spreadsheet may have made the text from: days since 1899-12-30, or day and month in either order."""
    if re.fullmatch(r"[1-9][0-9]{4}", value):
        meant = [datetime.date(1899, 12, 30) + datetime.timedelta(days=int(value))]
    else:
        parts = re.fullmatch(r"([0-9]{1,2})[./-]([0-9]{1,2})[./-]([0-9]{4})", value)
        numbers = [int(part) for part in parts.groups()] if parts else [0, 0, 0]
        orders = {(numbers[2], numbers[0], numbers[1]), (numbers[2], numbers[1], numbers[0])}
        meant = [day for day in map(_day, orders) if day is not None]
    if not meant:
        return " (a spreadsheet may have changed it)"
    words = " or ".join(f"{day:%Y-%m-%d}" for day in sorted(meant))
    return f"; a spreadsheet may have changed it from {words}"


def _day(numbers: tuple[int, int, int]) -> datetime.date | None:
    try:
        return datetime.date(*numbers)
    except ValueError:
        return None


def relative_path(value: str) -> str:
    """A path relative to the study folder, without a slash at its end."""
    if not value or value.startswith(("/", "~")) or "\\" in value or ":" in value[:3]:
        raise ValueError("must be a path relative to the study folder, with / between folders")
    return value.rstrip("/")


Date = Annotated[datetime.date, BeforeValidator(parse_date)]
"""A day, written year-month-day."""
RelativePath = Annotated[str, AfterValidator(relative_path)]
"""A path relative to the study folder."""


class Part(BaseModel):
    """A block of study.yaml: unknown keys are errors, values are not coerced."""

    model_config = ConfigDict(extra="forbid", frozen=True, strict=True, allow_inf_nan=False)


class StudyPart(Part):
    """What the study is called."""

    title: str = Field(min_length=1, max_length=200, description="Title of the study, as the report shows it.")


class TablesPart(Part):
    """Where the tables are, relative to the study folder."""

    setups: RelativePath = Field("config/setups.tsv", description="Table of setups.")
    phantoms: RelativePath = Field("config/phantoms.tsv", description="Table of phantom scans.")
    scans: RelativePath = Field("config/scans.tsv", description="Table of subject scans.")
    regions: RelativePath = Field("config/regions.tsv", description="Table of regions; a study may do without it.")


class ApprovalPart(Part):
    """Who fixed the target, when and why."""

    by: str | None = Field(None, description="Who approved the fixed target.")
    on: Date | None = Field(None, description="Date of the approval.")
    reason: str | None = Field(None, description="Why this target.")

    @property
    def complete(self) -> bool:
        """Whether all three are given."""
        return bool((self.by or "").strip() and self.on and (self.reason or "").strip())


class TargetPart(Part):
    """How the common width is decided."""

    choose: Literal["coarsest", "fixed"] = Field(
        "coarsest",
        description="`coarsest`: the least sharp period in use sets it; `fixed`: the widths below, approved.",
    )
    in_plane_mm: float | None = Field(None, gt=0, le=50, description="In-plane target, mm (for `fixed`).")
    axial_mm: float | None = Field(None, gt=0, le=50, description="Axial target, mm (for `fixed`).")
    isotropic: bool = Field(True, description="One width for both directions: the larger (for `coarsest`).")
    allowance_se: float = Field(
        2.0, ge=0, le=10, description="Standard errors added to each measured width before the coarsest is taken."
    )
    round_up_to_mm: float = Field(0.1, gt=0, le=5, description="The target is rounded up to a multiple of this, mm.")
    declared_counts: bool = Field(False, description="Whether a declared width may set the target.")
    approval: ApprovalPart = Field(default_factory=ApprovalPart, description="Needed for `fixed`.")

    @model_validator(mode="after")
    def _fixed_is_whole(self) -> "TargetPart":
        if self.choose == "fixed":
            if self.in_plane_mm is None or self.axial_mm is None:
                raise ValueError("a fixed target needs in_plane_mm and axial_mm")
            if not self.approval.complete:
                raise ValueError("a fixed target needs an approval: by, on and reason")
        elif self.in_plane_mm is not None or self.axial_mm is not None:
            raise ValueError("in_plane_mm and axial_mm are for `choose: fixed` only")
        return self


class PhantomsPart(Part):
    """Which phantom session speaks for a scan, and which kind of phantom for a width."""

    choose: Literal["latest_before", "nearest"] = Field(
        "latest_before", description="Session taken for a scan: the latest until its day, or the nearest in time."
    )
    valid_days: int = Field(365, ge=0, description="Days that a phantom session speaks for.")
    repeatability_mm: float = Field(
        0.2,
        ge=0,
        le=5,
        description="Scatter from session to session, mm, added to every standard error in quadrature.",
    )
    prefer: list[Kind] = Field(
        default=[*KINDS],
        min_length=1,
        description="Kinds of phantom in order of trust: the first that measured a direction gives its width.",
    )

    @field_validator("prefer")
    @classmethod
    def _each_once(cls, value: list[Kind]) -> list[Kind]:
        if len(set(value)) != len(value):
            raise ValueError("a kind stands twice in prefer")
        return value


class TolerancePart(Part):
    """How near is near enough."""

    achieved_mm: float = Field(
        0.3, gt=0, le=5, description="Largest difference of an achieved width from the target, mm."
    )
    no_kernel_below_mm: float = Field(0.5, ge=0, le=5, description="Kernels narrower than this are left out, mm.")


class HandoverPart(Part):
    """What the auditor gets."""

    include_images: bool = Field(
        False, description="Whether the bag for the auditor holds the harmonised images of the accepted scans."
    )


class Settings(Part):
    """All of study.yaml."""

    study: StudyPart = Field(description="What the study is called.")
    modality: Literal["pet", "spect"] = Field("pet", description="Kind of imaging; names the result folders.")
    demo: bool = Field(False, description="Whether the images are the invented ones that the program makes itself.")
    tables: TablesPart = Field(default_factory=TablesPart, description="Where the tables are.")
    results: RelativePath = Field("results", description="Folder that the workflow writes to.")
    target: TargetPart = Field(default_factory=TargetPart, description="How the common width is decided.")
    kernel: Literal["quadrature", "matched"] = Field(
        "quadrature",
        description=(
            "How a kernel follows from width and target: `quadrature`, or `matched` (adjusted until the period's own "
            "phantom measures at the target)."
        ),
    )
    phantoms: PhantomsPart = Field(default_factory=PhantomsPart, description="Which phantom speaks for which scan.")
    tolerance: TolerancePart = Field(default_factory=TolerancePart, description="How near is near enough.")
    coarser_than_target: Literal["hold", "stop"] = Field(
        "hold", description="What happens to scans of a period coarser than the target: held, or the run stops."
    )
    reconstruction_mismatch: Literal["hold", "flag"] = Field(
        "hold",
        description=(
            "What happens to a scan whose voxels, header or sidecar tell another reconstruction than its phantom's."
        ),
    )
    handover: HandoverPart = Field(default_factory=HandoverPart, description="What the auditor gets.")

    @field_validator("results")
    @classmethod
    def _inside(cls, value: str) -> str:
        parts = value.split("/")
        if not all(re.fullmatch(r"[A-Za-z0-9][A-Za-z0-9._ -]*", part) for part in parts) or parts[0] == "config":
            raise ValueError("must be a folder inside the study folder, other than config, in plain letters")
        return value
