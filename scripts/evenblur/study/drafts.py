"""Drafts of files that killed jobs left behind."""

import os
import re
from pathlib import Path

_DRAFT = re.compile(r"\..+\.(\d+)\.part")
"""The temporary name that files are written under before they get their own: name and process."""


def clear_drafts(study_dir: Path, results: str) -> list[str]:
    """Delete drafts below the results, and those of dead processes beside the study's own records.

    Call it only while this process holds the study's lock. A dry run may write beside a run, so that a draft of a
    living process outside the results stays.

    Returns
    -------
    list
        What was deleted, relative to the study folder, sorted.
    """
    found = [Path(where, name) for where, _, names in os.walk(study_dir / results) for name in names if _is_draft(name)]
    own = study_dir / ".evenblur"
    if own.is_dir():
        found += [path for path in own.iterdir() if _is_draft(path.name) and not _writer_lives(path.name)]
    for path in found:
        path.unlink(missing_ok=True)
    return sorted(path.relative_to(study_dir).as_posix() for path in found)


def _is_draft(name: str) -> bool:
    return name[0] == "." and _DRAFT.fullmatch(name) is not None


def _writer_lives(name: str) -> bool:
    match = _DRAFT.fullmatch(name)
    try:
        os.kill(int(match.group(1)) if match else 0, 0)
    except ProcessLookupError:
        return False
    except OSError:
        pass
    return True
