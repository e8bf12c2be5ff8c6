"""Look through a BIDS data set for PET images, without opening any of them.

What is taken from the specification (BIDS 1.11; its wording is from memory where no value is named beside it): the
entities of a name, the inheritance of sidecars, `scans.tsv` and `sessions.tsv` with `acq_time`, `participants.tsv`,
and its examples for many centres: a `site` column, sessions named after sites, phantoms as subjects `sub-phantom…`.
"""

import csv
import json
import re
from pathlib import Path
from typing import Any

from evenblur.errors import InputError
from evenblur.images.sidecars import RECONSTRUCTION_FIELDS
from evenblur.newstudy.found import FoundImage, Look, clean, comparable, day_of

_IMAGE = re.compile(r"sub-[^_]+(_[a-zA-Z0-9]+-[^_]+)*_pet\.nii(\.gz)?")
_SITE_COLUMNS = ("site", "site_id")
# Words of a sidecar's BodyPart and BodyPartDetails that tell the kind of a phantom: common practice, no source.
_KIND_WORDS = (
    ("point source", "point_source"),
    ("line source", "line_source"),
    ("capillar", "line_source"),
    ("sphere", "hot_spheres"),
    ("cylinder", "uniform_cylinder"),
)


def look_through_bids(folder: Path, look: Look, *, source: int) -> None:
    """Add a data set's PET images to what was found.

    Parameters
    ----------
    folder
        The data set.
    look
        What was found so far; it grows.
    source
        Number of the data set.

    Raises
    ------
    InputError
        If the folder is no BIDS data set, holds no PET image, or has a table that cannot be read.
    """
    description = folder / "dataset_description.json"
    if not description.is_file():
        what = "there is no dataset_description.json in it"
        raise InputError(str(folder), what, "name the folder of a BIDS data set")
    name = clean((_read_json(description) or {}).get("Name"))
    look.title = look.title or name
    data = _DataSet(folder)
    paths = data.images()
    bare = [path for path in paths if "_rec-nac" in path.name]  # the specification keeps these labels for this
    corrected = {path.parent for path in paths if path not in bare}
    left_out = {path for path in bare if path.parent in corrected}
    found = [data.image(path, source) for path in paths if path not in left_out]
    if left_out:
        look.left_out.append(
            f"{len(left_out)} images without attenuation correction (rec-nac...) beside a corrected one"
        )
    if data.unreadable:
        look.left_out.append(f"the sidecars {', '.join(data.unreadable)}, which are no JSON")
    if not found:
        raise InputError(str(folder), "holds no PET image (sub-*/.../pet/*_pet.nii.gz)", "name another data set")
    look.images += found


class _DataSet:
    """A data set's tables and sidecars."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self.participants = {
            row.get("participant_id", ""): row for row in _read_table(folder / "participants.tsv", ("participant_id",))
        }
        self._tables: dict[Path, list[dict[str, str]]] = {}
        self._sidecars: dict[Path, list[tuple[frozenset[tuple[str, str]], dict[str, Any]]]] = {}
        self.unreadable: list[str] = []

    def images(self) -> list[Path]:
        """Paths of the PET images in order; links to files that are not there count, for their rows are known."""
        places = [*self.folder.glob("sub-*/pet"), *self.folder.glob("sub-*/ses-*/pet")]
        return [path for place in sorted(places) for path in sorted(place.iterdir()) if _IMAGE.fullmatch(path.name)]

    def image(self, path: Path, source: int) -> FoundImage:
        entities = _entities(path.name)
        label, session = entities["sub"], entities.get("ses", "")
        fields = self._fields(path, entities)
        subject = self.folder / f"sub-{label}"
        scan_row = self._scan_row(path, subject, label, session)
        sessions = self._table(subject / f"sub-{label}_sessions.tsv")
        session_row = next((row for row in sessions if row.get("session_id") == f"ses-{session}"), {})
        rows = (scan_row, session_row, self.participants.get(f"sub-{label}", {}))
        acquired, remark = day_of(
            scan_row.get("acq_time"),
            session_row.get("acq_time"),
            *(fields.get(name) for name in ("ScanDate", "AcquisitionDate", "AcquisitionDateTime")),
        )
        remarks = [remark] if remark else []
        phantom = label.lower().startswith("phantom")
        kind = _kind(fields) if phantom else ""
        if kind:
            remarks.append("kind: guessed from the sidecar, look whether it is right")
        return FoundImage(
            path=path,
            source=source,
            phantom=phantom,
            subject=label,
            session=session,
            run=entities.get("run", ""),
            tracer=entities.get("trc", ""),
            site=next(filter(None, (_site(row) for row in rows)), ""),
            institution=clean(fields.get("InstitutionName")),
            scanner=clean(fields.get("ManufacturersModelName")),
            reconstruction=_reconstruction(fields),
            method=_method(fields),
            acquired=acquired,
            radionuclide=_radionuclide(fields),
            kind=kind,
            remarks=tuple(remarks),
        )

    def _scan_row(self, path: Path, subject: Path, label: str, session: str) -> dict[str, str]:
        """The image's row in scans.tsv, which lies beside the folder of the modality."""
        stem = f"sub-{label}" + (f"_ses-{session}" if session else "")
        name = f"{path.parent.name}/{path.name}"
        rows = self._table((subject / f"ses-{session}" if session else subject) / f"{stem}_scans.tsv")
        return next((row for row in rows if row.get("filename", "").lstrip("./") == name), {})

    def _table(self, path: Path) -> list[dict[str, str]]:
        if path not in self._tables:
            self._tables[path] = _read_table(path)
        return self._tables[path]

    def _fields(self, image: Path, entities: dict[str, str]) -> dict[str, Any]:
        """The fields of all sidecars that apply to an image: those nearer to it and more special win."""
        fields: dict[str, Any] = {}
        places = [image.parent, *image.parent.parents]
        for place in reversed(places[: places.index(self.folder) + 1]):
            for wanted, content in self._sidecars_in(place):
                if wanted <= entities.items():
                    fields.update(content)
        return fields

    def _sidecars_in(self, place: Path) -> list[tuple[frozenset[tuple[str, str]], dict[str, Any]]]:
        if place not in self._sidecars:
            found = []
            for path in sorted(place.glob("*pet.json")):
                if path.name == "pet.json" or path.name.endswith("_pet.json"):
                    content = _read_json(path)
                    if content is None:
                        self.unreadable.append(path.relative_to(self.folder).as_posix())
                    else:
                        found.append((frozenset(_entities(path.name).items()), content))
            self._sidecars[place] = sorted(found, key=lambda entry: len(entry[0]))
        return self._sidecars[place]


def _entities(name: str) -> dict[str, str]:
    parts = name.split(".", maxsplit=1)[0].split("_")[:-1]
    return dict(part.split("-", 1) for part in parts if "-" in part)


def _read_json(path: Path) -> dict[str, Any] | None:
    try:
        content = json.loads(path.read_text(encoding="utf-8-sig"))
    except (OSError, ValueError, RecursionError):
        return None
    return content if isinstance(content, dict) else None


def _read_table(path: Path, needed: tuple[str, ...] = ()) -> list[dict[str, str]]:
    try:
        text = path.read_text(encoding="utf-8-sig")
    except FileNotFoundError:
        return []
    except (OSError, UnicodeDecodeError):
        raise InputError(str(path), "is no text in UTF-8 that may be read", "mend the data set") from None
    lines = csv.reader(text.splitlines(), delimiter="\t", quoting=csv.QUOTE_NONE)
    header = [cell.strip() for cell in next(lines, [])]
    missing = [name for name in needed if name not in header]
    if missing:
        raise InputError(str(path), f"has no column {missing[0]}", "mend the data set")
    return [
        {name: "" if cell.strip().lower() == "n/a" else cell.strip() for name, cell in zip(header, cells, strict=False)}
        for cells in lines
    ]


def _site(row: dict[str, str]) -> str:
    plain = {name.lower(): value for name, value in row.items()}
    return next(filter(None, (clean(plain.get(name, "")) for name in _SITE_COLUMNS)), "")


def _kind(fields: dict[str, Any]) -> str:
    told = " ".join(clean(fields.get(name)) for name in ("BodyPart", "BodyPartDetails")).lower()
    return next((kind for word, kind in _KIND_WORDS if word in told), "")


def _radionuclide(fields: dict[str, Any]) -> str:
    """The radionuclide if it is written as one, as F18."""
    text = clean(fields.get("TracerRadionuclide"))
    return text if re.fullmatch(r"[A-Z][a-z]?-?\d{1,3}m?|\d{1,3}m?-?[A-Z][a-z]?", text) else ""


def _method(fields: dict[str, Any]) -> str:
    """What the workflow compares between a scan and its phantom; empty where nothing is told."""
    told = [fields.get(name) for name in RECONSTRUCTION_FIELDS]
    return comparable(told) if any(value not in (None, "", []) for value in told) else ""


def _reconstruction(fields: dict[str, Any]) -> str:
    """The reconstruction in one line: method, parameters, filter.

    >>> _reconstruction({"ReconMethodName": "ordered subsets", "ReconMethodParameterLabels": ["iterations"],
    ...                  "ReconMethodParameterValues": [4], "ReconFilterType": "gaussian", "ReconFilterSize": 5})
    'ordered subsets, iterations 4, gaussian filter 5 mm'
    """
    parts = [clean(fields.get("ReconMethodName"))]
    labels, values = fields.get("ReconMethodParameterLabels"), fields.get("ReconMethodParameterValues")
    if isinstance(labels, list) and isinstance(values, list) and len(labels) == len(values):
        parts += [f"{clean(label)} {clean(value)}".strip() for label, value in zip(labels, values, strict=True)]
    kinds, sizes = _listed(fields.get("ReconFilterType")), _listed(fields.get("ReconFilterSize"))
    for number, kind in enumerate(clean(kind) for kind in kinds):
        if kind.lower() == "none":
            parts.append("no filter")
        elif kind:
            size = clean(sizes[number]) if number < len(sizes) else ""
            parts.append(f"{kind} filter {size} mm" if size else f"{kind} filter")
    return clean(", ".join(filter(None, parts)))


def _listed(value: Any) -> list[Any]:
    return value if isinstance(value, list) else [] if value is None else [value]
