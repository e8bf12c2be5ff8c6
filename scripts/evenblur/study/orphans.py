"""Results that no row of the tables stands for any more, and how they are moved aside."""

import os
import shutil
from collections.abc import Iterable, Mapping
from pathlib import Path
from typing import Any

from evenblur.command import read_record
from evenblur.errors import InputError
from evenblur.images.digests import image_sha256
from evenblur.printable import printable
from evenblur.study.dataset import dataset_file_names
from evenblur.study.periods import is_matched, is_proved
from evenblur.study.reading import Study
from evenblur.study.records import Layout

WITHDRAWN_NAME = "withdrawn"
_DATASET_FILES = ("README", "README.md")


def find_orphans(study_dir: Path, study: Study, plan: Mapping[str, Any]) -> list[str]:
    """Files of the results that no row, accepted scan or period stands for, relative to the study folder, sorted.

    Parameters
    ----------
    study_dir, study
        The study folder and its study.
    plan
        The plan that stands.
    """
    layout = Layout(study)
    rows = {row.entities: row for row in study.scans}
    accepted = [rows[s["entities"]] for s in plan["scans"] if s["status"] == "accepted" and s["entities"] in rows]
    expected = {
        "intake": {*map(layout.intake, study.scans), *map(layout.intake, study.phantoms)},
        "resolution": {layout.resolution(row.phantom) for row in study.phantoms},
        "achieved": {layout.achieved(p["setup"], p["phantom_session"]) for p in plan["periods"] if is_proved(p)},
        "matching": _matching(study_dir, study, layout),
        "site_effect": {
            layout.site_effect,
            *(layout.regions(row.entities) for row in accepted if any(region.serves(row) for region in study.regions)),
        },
        "harmonised": {
            *(path for row in accepted for path in (layout.harmonised_image(row), layout.scan_record(row))),
            *(f"{layout.harmonised}/{name}" for name in [*dataset_file_names(study.settings), *_DATASET_FILES]),
        },
    }
    found: list[str] = []
    for folder, wanted in expected.items():
        found += set(_files(study_dir, f"{layout.results}/{folder}")) - wanted
    return sorted(found)


def _matching(study_dir: Path, study: Study, layout: Layout) -> set[str]:
    if study.settings.kernel != "matched":
        return set()
    try:
        periods = read_record(study_dir / layout.draft_plan)["periods"]
    except (InputError, KeyError):
        return set(_files(study_dir, f"{layout.results}/matching"))  # nobody can tell before there is a draft
    return {layout.matching(p["setup"], p["phantom_session"]) for p in periods if is_matched(p)}


def _files(study_dir: Path, folder: str) -> list[str]:
    """Files below a folder; drafts that a step is just writing begin with a dot and end in `.part`."""
    return [
        Path(where, name).relative_to(study_dir).as_posix()
        for where, _, names in os.walk(study_dir / folder)
        for name in names
        if not (name.startswith(".") and name.endswith(".part"))
    ]


def orphans_sentence(found: list[str]) -> str:
    """One line that names them, the first few of many.

    >>> orphans_sentence(["results/intake/scans/sub-q02_ses-base.json"])
    'no row stands for results/intake/scans/sub-q02_ses-base.json; scripts/tidy_study.py moves it aside'
    """
    few = 4
    named = ", ".join(map(printable, found[:few])) + (f" and {len(found) - few} more files" if len(found) > few else "")
    return f"no row stands for {named}; scripts/tidy_study.py moves {'it' if len(found) == 1 else 'them'} aside"


def resting_places(study_dir: Path, found: Iterable[str]) -> dict[str, str]:
    """Where each file goes: the same path below `withdrawn`, or a numbered one where another file lies there."""
    taken: set[str] = set()
    places = {}
    for name in found:
        number, place = 1, f"{WITHDRAWN_NAME}/{name}"
        while place in taken or ((study_dir / place).exists() and not _same_bytes(study_dir / name, study_dir / place)):
            number += 1
            place = f"{WITHDRAWN_NAME}/{_numbered(name, number)}"
        taken.add(place)
        places[name] = place
    return places


def _numbered(name: str, number: int) -> str:
    folder, slash, last = name.rpartition("/")
    stem, dot, endings = last.partition(".")
    return f"{folder}{slash}{stem}~{number}{dot}{endings}"


def _same_bytes(first: Path, second: Path) -> bool:
    return first.stat().st_size == second.stat().st_size and image_sha256(first) == image_sha256(second)


def move_aside(source: Path, place: Path) -> None:
    """Move a file, also to another file system; a kill at any moment leaves it whole in one place or both.

    A file with the same bytes that lies there already is what a killed move left: then only the source goes.
    """
    place.parent.mkdir(parents=True, exist_ok=True)
    if not place.exists():
        try:
            source.rename(place)
            return
        except OSError:
            draft = place.with_name(f".{place.name}.part")
            shutil.copy2(source, draft)
            with draft.open("rb") as stream:
                os.fsync(stream.fileno())
            draft.replace(place)
    if not _same_bytes(source, place):
        raise InputError(str(place), "is not a whole copy of what was moved", "look at the disk and call again")
    source.unlink()


def remove_empty_folders(study_dir: Path, names: Iterable[str], *, results: str) -> None:
    """Take away the folders that moved files leave empty, up to the results folder's own parts."""
    for name in names:
        folder = (study_dir / name).parent
        while folder.is_dir() and study_dir / results not in (folder, folder.parent) and not any(folder.iterdir()):
            folder.rmdir()
            folder = folder.parent
