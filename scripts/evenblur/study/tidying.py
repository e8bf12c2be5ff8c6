"""Move what no row stands for out of the results, with a line in the history."""

from pathlib import Path

from evenblur.command import read_record, write_record
from evenblur.errors import InputError
from evenblur.runlock import StudyLockedError, read_lock, release_lock, take_lock
from evenblur.study.history import WITHDRAWN, Entry, append, told_disagreements
from evenblur.study.orphans import find_orphans, move_aside, remove_empty_folders, resting_places
from evenblur.study.reading import Study
from evenblur.study.records import Layout

_REASON = "no row of the tables stands for it"


def tidy(study_dir: Path, study: Study, *, date: str, dry_run: bool = False) -> dict[str, str]:
    """Move every result that no row stands for below `withdrawn`.

    Parameters
    ----------
    study_dir, study
        The study folder and its study.
    date
        Day of the lines in the history.
    dry_run
        Only look.

    Returns
    -------
    dict
        New path by old path, both relative to the study folder.

    Raises
    ------
    InputError
        If a run holds the study, there is no plan, or a file cannot be moved.
    """
    if dry_run:
        return _places(study_dir, study)
    lock = read_lock(study_dir)
    if lock is not None and lock.alive:
        raise InputError(str(study_dir), "a run works on this study", "wait for its end")
    try:
        take_lock(study_dir)
    except StudyLockedError as error:
        raise InputError(str(study_dir), str(error), "wait for its end") from error
    try:
        places = _places(study_dir, study)
        if places:
            # The lines come first, so that nothing ever moves without one.
            audit = study_dir / Layout(study).audit("history.json")
            lines = [Entry(f"file {name}", WITHDRAWN, name, place, _REASON) for name, place in places.items()]
            head = append(study_dir, lines, date=date, recorded=audit)
            if audit.is_file():
                write_record(audit, {**head, "problems": told_disagreements(study_dir)})
            for name, place in places.items():
                move_aside(study_dir / name, study_dir / place)
            remove_empty_folders(study_dir, places, results=study.settings.results)
        return places
    finally:
        release_lock(study_dir)


def _places(study_dir: Path, study: Study) -> dict[str, str]:
    plan = read_record(study_dir / Layout(study).plan)
    return resting_places(study_dir, find_orphans(study_dir, study, plan))
