"""Propose the rows of the three tables from what was found: sites, setups, phantom sessions, labels."""

import os
from collections import Counter
from collections.abc import Iterable
from dataclasses import dataclass, field, replace
from pathlib import Path

from evenblur.newstudy.found import FoundImage, Look
from evenblur.newstudy.labels import bids_label, hashed_labels, named_labels, normal, site_label, unique

SETUP_COLUMNS = (
    "setup",
    "site",
    "scanner",
    "reconstruction",
    "declared_in_plane_mm",
    "declared_axial_mm",
    "declared_se_mm",
    "declared_source",
    "changed",
    "note",
)
PHANTOM_COLUMNS = (
    "phantom",
    "setup",
    "phantom_session",
    "acquired",
    "kind",
    "image",
    "details",
    "radionuclide",
    "valid_until",
    "use",
    "use_reason",
    "decided_by",
    "note",
)
SCAN_COLUMNS = (
    "subject",
    "session",
    "setup",
    "acquired",
    "image",
    "run",
    "tracer",
    "radionuclide",
    "use",
    "use_reason",
    "decided_by",
    "note",
)
LONE_SESSION = "1"
"""Session label of a scan whose data set has no sessions: the tables need one."""

NEEDED = {
    "setups": ("setup", "site"),
    "phantoms": ("phantom", "setup", "phantom_session", "acquired", "kind", "image"),
    "scans": ("subject", "session", "setup", "acquired", "image"),
}
"""Columns that may not stay empty, by table."""


@dataclass
class Proposal:
    """The rows of the tables; `links` are the links to make, from paths in the study folder to the files meant."""

    setups: list[dict[str, str]] = field(default_factory=list)
    phantoms: list[dict[str, str]] = field(default_factory=list)
    scans: list[dict[str, str]] = field(default_factory=list)
    links: dict[str, Path] = field(default_factory=dict)
    lone_sessions: int = 0

    @property
    def tables(self) -> dict[str, tuple[tuple[str, ...], list[dict[str, str]]]]:
        """Columns and rows by the table's name."""
        return {
            "setups": (SETUP_COLUMNS, self.setups),
            "phantoms": (PHANTOM_COLUMNS, self.phantoms),
            "scans": (SCAN_COLUMNS, self.scans),
        }

    def empty_cells(self) -> list[tuple[str, str, int]]:
        """Needed cells that stay empty: table, column, in how many rows."""
        counts = Counter(
            (table, column)
            for table, (_, rows) in self.tables.items()
            for row in rows
            for column in NEEDED[table]
            if not row.get(column)
        )
        return [(table, column, count) for (table, column), count in counts.items()]


@dataclass
class _Setup:
    """A setup in the making: the facts that its images share."""

    label: str
    site: str
    scanner: str
    method: str
    shown: FoundImage
    phantoms: int = 0

    def fits(self, image: FoundImage) -> bool:
        """Whether what the image tells does not speak against it; what it does not tell fits."""
        scanner_fits = not image.scanner or normal(image.scanner) == normal(self.scanner)
        return scanner_fits and (not image.method or image.method == self.method)


def propose(look: Look, *, study_dir: Path, keep_names: bool = False) -> Proposal:
    """Propose the tables' rows.

    Parameters
    ----------
    look
        What was found.
    study_dir
        The study folder, which the paths in the tables are relative to.
    keep_names
        Whether labels of sites may be made of institutions' names; they are hashed otherwise.

    Returns
    -------
    Proposal
        The rows. Labels are valid and unique in any case; needed cells that nothing tells are empty, with a note.
    """
    proposal = Proposal()
    images = _apart(look.images)
    sites = _sites(images, keep_names=keep_names)
    setups, owner = _setups(images, sites)
    sessions = _phantom_sessions([(image, owner.get(image)) for image in images if image.phantom])
    taken: set[str] = set()
    for image in images:
        found = owner.get(image)
        notes = [*image.remarks]
        if found is None:
            notes.insert(0, "setup: several fit what the image tells, write the right one")
        cells = {"setup": found.label if found else "", "acquired": image.acquired, "radionuclide": image.radionuclide}
        if image.phantom:
            found_label = _phantom_label(image, taken)
            cells |= {"phantom": found_label, "phantom_session": sessions[image], "kind": image.kind, "use": "yes"}
            cells["image"] = _image_path(image, f"phantoms/{found_label}", study_dir, proposal)
            if not image.kind:
                notes.append("kind, details: write what was scanned")
            proposal.phantoms.append(cells | {"note": "; ".join(notes)})
        else:
            cells |= {"subject": bids_label(image.subject), "session": bids_label(image.session) or LONE_SESSION}
            cells |= {"run": bids_label(image.run), "tracer": bids_label(image.tracer), "use": "yes"}
            key = "_".join(cells[name] for name in ("subject", "session", "tracer", "run") if cells[name])
            cells["image"] = _image_path(image, f"scans/{key}", study_dir, proposal)
            proposal.lone_sessions += not image.session
            proposal.scans.append(cells | {"note": "; ".join(notes)})
    proposal.setups = [_setup_row(setup) for setup in setups]
    _note_twins(proposal.scans)
    return proposal


def _apart(images: list[FoundImage]) -> list[FoundImage]:
    """The images with subjects of several data sets kept apart where they have the same label."""
    first: dict[str, int] = {}
    kept = []
    for image in images:
        if not image.phantom and first.setdefault(image.subject.lower(), image.source) != image.source:
            remark = f"subject: another data set has {image.subject} too, so this one has set{image.source} before it"
            kept.append(replace(image, subject=f"set{image.source}{image.subject}", remarks=(*image.remarks, remark)))
        else:
            kept.append(image)
    return kept


def _sites(images: list[FoundImage], *, keep_names: bool) -> dict[FoundImage, str]:
    """The site's label of each image; empty where nothing tells it.

    A site column comes first. An institution whose images with a site column all name one site is that site; another
    one gives a label of its own. What is left is the session, if it is named after a site.
    """
    columns = named_labels(image.site for image in images if image.site)
    homes: dict[str, set[str]] = {}
    for image in images:
        if image.site and image.institution:
            homes.setdefault(normal(image.institution), set()).add(columns[normal(image.site)])
    strangers = {normal(image.institution): image.institution for image in images if image.institution}
    strangers = {name: text for name, text in strangers.items() if len(homes.get(name, ())) != 1}
    institutions = (named_labels if keep_names else hashed_labels)(strangers.values())
    taken = {label.lower() for label in columns.values()}
    institutions = {name: unique(label, taken) for name, label in sorted(institutions.items())}
    institutions |= {name: next(iter(labels)) for name, labels in homes.items() if len(labels) == 1}
    known = {label.lower(): label for label in [*columns.values(), *institutions.values()]}
    told: dict[FoundImage, str] = {}
    for image in images:
        label = columns.get(normal(image.site), "") if image.site else institutions.get(normal(image.institution), "")
        if not label and image.session:
            label = known.get(image.session.lower(), known.get(site_label(image.session).lower(), ""))
        told[image] = label
    return told


def _setups(images: list[FoundImage], sites: dict[FoundImage, str]) -> tuple[list[_Setup], dict[FoundImage, _Setup]]:
    """Setups, and each image's; an image that several fit has none."""
    groups: dict[tuple[str, int], list[FoundImage]] = {}
    for image in images:
        # Images of different data sets without a site are not taken to be of one place.
        groups.setdefault((sites[image], 0 if sites[image] else image.source), []).append(image)
    setups: list[_Setup] = []
    owner: dict[FoundImage, _Setup] = {}
    taken: set[str] = set()
    for (site, _), members in sorted(groups.items(), key=lambda entry: entry[0]):
        own: list[_Setup] = []
        # Those that tell most come first, so that the others find a setup to fit.
        for image in sorted(members, key=_telling):
            fitting = [setup for setup in own if setup.fits(image)]
            if not fitting:
                label = unique(f"{site or 'setup'}-{len(own) + 1}", taken)
                fitting = [_Setup(label, site, image.scanner, image.method, image)]
                own += fitting
            if len(fitting) == 1:
                owner[image] = fitting[0]
                fitting[0].phantoms += image.phantom
        setups += own
    return setups, owner


def _telling(image: FoundImage) -> tuple[int, str, str, str]:
    known = bool(image.scanner) + bool(image.method)
    return -known, normal(image.scanner), image.reconstruction, image.method


def _setup_row(setup: _Setup) -> dict[str, str]:
    notes = [] if setup.site else ["site: nothing tells it, write its label"]
    if not setup.phantoms:
        notes.append("no phantom image was found: send one, or write declared widths with their source")
    return {
        "setup": setup.label,
        "site": setup.site,
        "scanner": setup.shown.scanner,
        "reconstruction": setup.shown.reconstruction,
        "note": "; ".join(notes),
    }


def _phantom_sessions(phantoms: Iterable[tuple[FoundImage, _Setup | None]]) -> dict[FoundImage, str]:
    """Labels p1, p2, ... for each setup's days in their order; without a day the data set's session tells."""
    listed = list(phantoms)
    days: dict[str, set[tuple[str, str]]] = {}
    for image, setup in listed:
        days.setdefault(setup.label if setup else "", set()).add(_moment(image))
    return {
        image: f"p{sorted(days[setup.label if setup else '']).index(_moment(image)) + 1}" for image, setup in listed
    }


def _moment(image: FoundImage) -> tuple[str, str]:
    return (image.acquired, "") if image.acquired else ("9999", f"{image.subject} {image.session}")


def _phantom_label(image: FoundImage, taken: set[str]) -> str:
    parts = [image.subject, image.session, image.tracer, f"run{image.run}" if image.run else ""]
    return unique("-".join(filter(None, map(bids_label, parts)))[:56], taken)


def _image_path(image: FoundImage, name: str, study_dir: Path, proposal: Proposal) -> str:
    """The image's path for the table: a file where it lies, a series by a link that does not tell its folder's name."""
    if image.path.is_dir():
        folder = f"images/{name}"
        if not image.files:
            proposal.links[folder] = image.path
        for number, file in enumerate(image.files, start=1):
            proposal.links[f"{folder}/{number:05d}.dcm"] = file
        return folder
    return Path(os.path.relpath(image.path, study_dir)).as_posix()


def _note_twins(rows: list[dict[str, str]]) -> None:
    """Say at rows with the same entities that one of them is to be chosen."""
    names = ("subject", "session", "tracer", "run")
    counts = Counter(tuple(row[name].lower() for name in names) for row in rows)
    for row in rows:
        if counts[tuple(row[name].lower() for name in names)] > 1:
            twin = "several images of one scan: keep one row, or tell them apart by run"
            row["note"] = "; ".join(filter(None, [row["note"], twin]))
