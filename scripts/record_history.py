"""Record in history.tsv what changed since the last run: decisions, phantoms, target, kernels, scans.

Inputs: the study's settings and tables, the plan, the resolution records and the records of the harmonised scans.
Outputs: new lines in STUDY/history.tsv (none where nothing changed), and history.json under the audit folder of the
results with the number of lines, the hash of the last one and what is wrong with the history, if anything is.
"""

import json
from pathlib import Path
from typing import Any

from evenblur.command import Arguments, run, write_record
from evenblur.errors import InputError


def main(arguments: list[str]) -> None:
    """Read the arguments, compare with what was last recorded, append, say where the history stands."""
    parser = Arguments(description=__doc__)
    parser.add_argument("--study-dir", type=Path, default=Path(), help="the study folder (default: here)")
    parser.add_argument("--date", help="day of the new lines, year-month-day (default: today, UTC)")
    parser.add_argument("--program", default="{}", help="code identities of the steps, as a JSON object")
    parser.add_argument("--found", default="[]", help="what was found wrong before the run, as a JSON list")
    options = parser.parse_args(arguments)

    from evenblur.study.history import today
    from evenblur.study.reading import load_study
    from evenblur.study.recording import record_history
    from evenblur.study.records import Layout

    program = _plain("--program", options.program, {})
    found = _plain("--found", options.found, [])
    study = load_study(options.study_dir)
    record = record_history(
        options.study_dir,
        study,
        date=today(options.date),
        program=program,
        found=found,
    )
    write_record(options.study_dir / Layout(study).audit("history.json"), record)


def _plain(option: str, text: str, like: Any) -> Any:
    """An option that holds JSON: an object or list of texts."""
    try:
        value = json.loads(text)
    except ValueError as error:
        raise InputError(option, f"is no JSON ({error})", "leave it out, or mend it") from error
    parts = list(value.values()) if isinstance(value, dict) else value
    if not isinstance(value, type(like)) or not all(isinstance(part, str) for part in parts):
        raise InputError(option, f"is no JSON {type(like).__name__} of texts", "leave it out, or mend it")
    return value


if __name__ == "__main__":
    raise SystemExit(run(main))
