"""The audit as data: what `audit.json` holds. Tables' numbers, typed; the report and the site records are views of it.

Widths are in mm; None stands for a value that is not known. Names of a period's and a scan's numbers are the columns of
`sites.tsv` and `scans.tsv`, and so are their decimals.
"""

from dataclasses import dataclass
from typing import Annotated, Any, Literal

from pydantic import BaseModel, ConfigDict, Field

Sha256 = Annotated[str, Field(pattern=r"^([0-9a-f]{64})?$", description="SHA-256, hex; empty where there is none.")]
Verdict = Literal["pass", "fail", "unproven", "declared", "coarser", "unmeasured"]


class Part(BaseModel):
    """A part of the record: no key but those that are listed."""

    model_config = ConfigDict(extra="forbid", frozen=True, strict=True)


class FlagRecord(Part):
    """A flag: its code and its sentence."""

    code: str
    text: str


class StudyRecord(Part):
    """What study it is."""

    title: str
    modality: Literal["pet", "spect"]
    demo: bool = Field(description="The study is the invented demonstration.")


class SummaryRecord(Part):
    """The verdict in a sentence and in numbers."""

    sentence: str
    periods: int = Field(ge=0)
    periods_passing: int = Field(ge=0)
    scans_accepted: int = Field(ge=0)
    scans_held: int = Field(ge=0)
    clean: bool = Field(description="No stray file, no missing file, no record that contradicts the plan.")
    stray_files: list[str]
    faults: list[str]


class TargetRecord(Part):
    """The common width and how it was decided."""

    in_plane_mm: float | None
    axial_mm: float | None
    choose: str
    decided_by: str
    on: str
    reason: str
    sentences: list[str]


@dataclass(frozen=True)
class Side:
    """One direction of a period, mm."""

    name: str
    word: str
    source: str
    measured_mm: float | None
    se_mm: float | None
    half_interval_mm: float | None
    kernel_mm: float | None
    target_mm: float | None
    achieved_mm: float | None
    resulting_se_mm: float | None
    resulting_half_interval_mm: float | None


class PeriodRecord(Part):
    """A period: the columns of `sites.tsv`, then what explains them."""

    setup: str
    site: str
    scanner: str
    reconstruction: str
    phantom_session: str
    phantom_kinds: list[str]
    measured_in_plane_mm: float | None
    measured_in_plane_se_mm: float | None
    measured_axial_mm: float | None
    measured_axial_se_mm: float | None
    target_in_plane_mm: float | None
    target_axial_mm: float | None
    kernel_in_plane_mm: float | None
    kernel_axial_mm: float | None
    achieved_in_plane_mm: float | None
    achieved_axial_mm: float | None
    verdict: Verdict
    scans_accepted: int = Field(ge=0)
    scans_held: int = Field(ge=0)
    phantom_sha256: list[Sha256]
    flags: list[str]
    quadrature_kernel_in_plane_mm: float | None
    quadrature_kernel_axial_mm: float | None
    kernel_rule: str
    resulting_in_plane_se_mm: float | None
    resulting_axial_se_mm: float | None
    status: Literal["smooth", "at_target", "coarser", "unmeasured"]
    acquired: str = Field(description="Day of the phantom session; empty for a declared width.")
    phantoms: list[str]
    in_plane_source: str = Field(description="Kind of phantom, `declared`, or empty.")
    axial_source: str = Field(description="Kind of phantom, `declared`, or empty.")
    measured_in_plane_half_interval_mm: float | None = Field(description="Half the 95 % interval.")
    measured_axial_half_interval_mm: float | None = Field(description="Half the 95 % interval.")
    resulting_in_plane_half_interval_mm: float | None = Field(description="Half the 95 % interval.")
    resulting_axial_half_interval_mm: float | None = Field(description="Half the 95 % interval.")
    noise_factor: float | None = Field(
        description="What smoothing leaves of the standard deviation of noise that differs from voxel to voxel: the "
        "median over the period's scans."
    )
    why: str = Field(description="Why the verdict is not `pass`; empty where it is.")
    stands_out: list[str] = Field(description="What sets the period apart from the others, in words.")
    flag_texts: list[FlagRecord]

    @property
    def name(self) -> str:
        """The period as the report names it."""
        return f"{self.setup} · {self.phantom_session}"

    @property
    def key(self) -> str:
        """The period as file names and anchors name it."""
        return f"{self.setup}.{self.phantom_session}"

    @property
    def sides(self) -> tuple[Side, Side]:
        """The two directions."""
        return self._side("in_plane", "in-plane"), self._side("axial", "axial")

    def _side(self, name: str, word: str) -> Side:
        return Side(
            name=name,
            word=word,
            source=(getattr(self, f"{name}_source") or "none").replace("_", " "),
            measured_mm=getattr(self, f"measured_{name}_mm"),
            se_mm=getattr(self, f"measured_{name}_se_mm"),
            half_interval_mm=getattr(self, f"measured_{name}_half_interval_mm"),
            kernel_mm=getattr(self, f"kernel_{name}_mm"),
            target_mm=getattr(self, f"target_{name}_mm"),
            achieved_mm=getattr(self, f"achieved_{name}_mm"),
            resulting_se_mm=getattr(self, f"resulting_{name}_se_mm"),
            resulting_half_interval_mm=getattr(self, f"resulting_{name}_half_interval_mm"),
        )


class ScanRecord(Part):
    """A scan: the columns of `scans.tsv`, then what explains them."""

    subject: str
    session: str
    setup: str
    phantom_session: str
    status: Literal["accepted", "held"]
    reasons: list[str]
    kernel_in_plane_mm: float | None
    kernel_axial_mm: float | None
    voxel_mm: list[float]
    frames: int | None
    input: str
    input_sha256: Sha256
    output: str
    output_sha256: Sha256
    total_before: float | None = Field(description="Sum times voxel volume, image unit times mL, all frames.")
    total_after: float | None = Field(description="Sum times voxel volume, image unit times mL, all frames.")
    smoothing_version: str
    days_from_phantom: int | None
    flags: list[str]
    entities: str
    site: str
    notes: dict[str, str] = Field(description="Each hold reason's own words.")


class WidthRecord(Part):
    """A phantom's width in one direction, mm, with the width of each half of its data."""

    fwhm_mm: float | None
    se_mm: float | None
    df: float | None
    halves_mm: list[float] | None
    halves_difference_se_mm: float | None


class PhantomRecord(Part):
    """A phantom scan and what was measured from it."""

    phantom: str
    setup: str
    site: str
    phantom_session: str
    kind: str
    acquired: str
    image: str
    sha256: Sha256
    in_use: bool
    in_plane: WidthRecord | None
    axial: WidthRecord | None
    flags: list[FlagRecord]


class OtherKindRecord(Part):
    """Another kind of phantom that measured a period: compared, not used."""

    setup: str
    phantom_session: str
    kind: str
    direction: str
    fwhm_mm: float | None
    difference_mm: float | None
    combined_se_mm: float | None


class QueryRecord(Part):
    """A line of `queries.tsv`."""

    site: str
    item: str
    code: str
    sentence: str
    who_acts: str


class ExclusionRecord(Part):
    """A row that a decision took out of use."""

    what: Literal["phantom", "scan"]
    item: str
    setup: str
    site: str
    reason: str
    decided_by: str


class VersionRecord(Part):
    """How many scans one program version smoothed."""

    version: str
    scans: int = Field(ge=1)


class MethodRecord(Part):
    """A way that widths were measured."""

    name: str
    version: str


class HistoryRecord(Part):
    """The head of the study's change log: how many lines, and the SHA-256 of the file."""

    lines: int = Field(ge=0)
    sha256: Sha256


class ProgramRecord(Part):
    """What made the audit."""

    name: Literal["evenblur"] = "evenblur"
    version: str


class AuditRecord(Part):
    """The whole audit."""

    format: Literal["evenblur-audit-1"] = "evenblur-audit-1"
    program: ProgramRecord
    study: StudyRecord
    summary: SummaryRecord
    target: TargetRecord
    periods: list[PeriodRecord]
    other_kinds: list[OtherKindRecord]
    scans: list[ScanRecord]
    phantoms: list[PhantomRecord]
    queries: list[QueryRecord]
    exclusions: list[ExclusionRecord]
    versions: list[VersionRecord]
    methods: list[MethodRecord]
    settings: dict[str, Any] = Field(description="study.yaml as resolved.")
    history: HistoryRecord | None


class SetupRecord(Part):
    """A setup as the site described it."""

    setup: str
    scanner: str
    reconstruction: str
    declared_in_plane_mm: float | None
    declared_axial_mm: float | None
    declared_source: str
    changed: list[str]


class SiteTargetRecord(Part):
    """The common width, without a word about who set it."""

    in_plane_mm: float | None
    axial_mm: float | None
    choose: str
    on: str


class SiteRecord(Part):
    """A site's own smoothing record: complete by itself, silent about other sites."""

    format: Literal["evenblur-site-1"] = "evenblur-site-1"
    program: ProgramRecord
    study: StudyRecord
    site: str
    target: SiteTargetRecord
    tolerance_mm: float
    repeatability_mm: float
    setups: list[SetupRecord]
    periods: list[PeriodRecord]
    other_kinds: list[OtherKindRecord]
    scans: list[ScanRecord]
    phantoms: list[PhantomRecord]
    queries: list[QueryRecord]
    exclusions: list[ExclusionRecord]
