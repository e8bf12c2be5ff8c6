"""A guard for the day when Snakemake's own records of how results were made are lost.

Snakemake compares settings and code with its records in `.snakemake`. Where they are gone (a copy without hidden
folders, a cleaned disk) it takes whatever results lie there as current. So every step that starts from images has one
small file among its inputs: it gets a new date when the records are gone, and everything older is made again. While
the records are there the file's content, which never changes, counts and not its date.
"""

import os
from pathlib import Path

from evenblur.command import write_text

PROVENANCE = ".evenblur/provenance.txt"
_TEXT = "Results older than this file have no record of how they were made, unless Snakemake keeps one.\n"


def keep_provenance(study_dir: Path, results: str) -> bool:
    """See that the file is there, with a new date where results stand without records.

    Returns
    -------
    bool
        Whether there are results whose records are gone.
    """
    path = study_dir / PROVENANCE
    recorded = _holds_anything(study_dir / ".snakemake" / "metadata")
    orphaned = not recorded and (study_dir / results / "plan.json").is_file()
    if not path.is_file() or path.read_text(encoding="utf-8") != _TEXT:
        write_text(path, _TEXT)
    elif orphaned:
        os.utime(path)
    return orphaned


def _holds_anything(folder: Path) -> bool:
    try:
        with os.scandir(folder) as found:
            return next(found, None) is not None
    except OSError:
        return False
