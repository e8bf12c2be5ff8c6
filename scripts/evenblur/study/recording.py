"""Bring the history up to what the records of a run say."""

from collections.abc import Iterable, Mapping
from pathlib import Path
from typing import Any

from evenblur.study.history import HISTORY_NAME, append, differences, entries, fold, told_disagreements
from evenblur.study.reading import Study
from evenblur.study.records import Layout
from evenblur.study.state import current_state, reasons_of


def record_history(
    study_dir: Path, study: Study, *, date: str, program: Mapping[str, str], found: Iterable[str] = ()
) -> dict[str, Any]:
    """Append what changed since the last recorded state; nothing is appended where nothing changed.

    Parameters
    ----------
    study_dir, study
        The study folder and its study.
    date
        Day of the new lines.
    program
        Code identities of the steps.
    found
        Findings about the history from before the run.

    Returns
    -------
    dict
        `lines`, `sha256` (of the last line) and `problems`: sentences about a history that another hand changed.

    Raises
    ------
    InputError
        If a record that the plan asks for is missing or damaged.
    """
    recorded = fold(entries(study_dir / HISTORY_NAME))
    now = current_state(study_dir, study, program=program)
    lines = differences(recorded, now, reasons=reasons_of(study))
    audit = study_dir / Layout(study).audit("history.json")
    head = append(study_dir, lines, date=date, recorded=audit, known=found)
    return {**head, "problems": told_disagreements(study_dir)}
