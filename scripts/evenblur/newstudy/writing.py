"""Write the files of a new study: all of them or none, and never over others."""

import json
import os
import re
import shutil
from pathlib import Path

from evenblur.command import write_text
from evenblur.errors import InputError
from evenblur.newstudy.proposing import Proposal

# What the demonstration's study.yaml decides for itself; a new study starts from the defaults.
_DEFAULTS = {
    "demo": "false",
    "choose: fixed": "coarsest",
    "in_plane_mm": "null",
    "axial_mm": "null",
    "by": "null",
    "on": "null",
    "reason": "null",
}
_HEADING = """\
# The study's settings. Every key but study.title has the default named here; a line may be left out.
# Check the study before the run: python3 scripts/start.py run STUDY check

"""
_README = """\
# The files of this study

| file | what it says |
|---|---|
| `study.yaml` | how the study is run: the target, which phantom speaks for which scan, what is near enough |
| `setups.tsv` | one row a setup: one scanner with one reconstruction at one site |
| `phantoms.tsv` | one row a phantom scan |
| `scans.tsv` | one row a subject scan |
| `regions.tsv` | if you write one: a row a region that sites are compared by |

The tables are tab-separated text in UTF-8 with a header line. Paths are relative to the study folder. Dates are written
year-month-day (`2026-03-31`). An empty cell means "not given"; the column `note` says what somebody still has to fill
in and what was guessed. Change or empty a note as you like: it decides nothing.

"""


def settings_text(demonstration: str, *, title: str, modality: str) -> str:
    r"""A commented study.yaml with the defaults: the demonstration's, without what it decides for itself.

    Parameters
    ----------
    demonstration
        Text of the demonstration's study.yaml.
    title, modality
        The study's own.

    >>> settings_text("\nstudy:\n  title: Invented\ndemo: true", title="Mine", modality="pet").splitlines()[-3:]
    ['study:', '  title: "Mine"', 'demo: false']
    """
    own = _DEFAULTS | {"title": json.dumps(title, ensure_ascii=False), "modality": modality}
    lines: list[str] = []
    dropped = 99  # lines indented deeper than this belong to a value that was replaced
    for line in demonstration[demonstration.index("\nstudy:") + 1 :].splitlines():
        indent = len(line) - len(line.lstrip())
        if line.strip() and indent > dropped:
            continue
        dropped = 99
        key, _, value = line.strip().partition(":")
        new = own.get(key, own.get(f"{key}: {value.strip()}"))
        if new is None or line.lstrip().startswith("#") or not value:
            lines.append(line)
        else:
            lines.append(f"{' ' * indent}{key}: {new}")
            dropped = indent
    return _HEADING + "\n".join(lines) + "\n"


def readme_text(demonstration: str) -> str:
    """The page about keys, columns and codes, for the study's own folder."""
    keys = demonstration[demonstration.index("## Keys of study.yaml") :]
    return _README + re.sub(r"<!-- .*? -->\n\n?", "", keys)


def table_text(columns: tuple[str, ...], rows: list[dict[str, str]]) -> str:
    r"""A tab-separated table.

    >>> table_text(("a", "b"), [{"a": "1"}])
    'a\tb\n1\t\n'
    """
    return "".join("\t".join(cells) + "\n" for cells in [columns, *([row.get(c, "") for c in columns] for row in rows)])


def refuse_existing(study_dir: Path, names: tuple[str, ...] = ("config",)) -> None:
    """Stop if the study folder holds one of the folders that are to be written.

    Raises
    ------
    InputError
        If one is there, or the name is no folder's.
    """
    if study_dir.exists() and not study_dir.is_dir():
        raise InputError(str(study_dir), "is no folder", "name another one for the study")
    for name in names:
        if os.path.lexists(study_dir / name):  # a link that leads nowhere is somebody's, too
            mend = "name another folder for the study; nothing was changed"
            raise InputError(str(study_dir / name), "is there already and is never overwritten", mend)


def write_study(study_dir: Path, proposal: Proposal, *, program: Path, title: str, modality: str) -> None:
    """Write the study's files and links.

    Parameters
    ----------
    study_dir
        The study folder; it is made if need be.
    proposal
        Rows and links.
    program
        The program's own folder, whose demonstration lends its comments.
    title, modality
        The study's title and modality.

    Raises
    ------
    InputError
        If there are such files already.
    """
    # The folder whose presence makes it a study comes last.
    parts = ("images", "config") if proposal.links else ("config",)
    refuse_existing(study_dir, parts)
    config = program / "config"
    texts = {
        "study.yaml": settings_text(
            (config / "study.yaml").read_text(encoding="utf-8"), title=title, modality=modality
        ),
        "README.md": readme_text((config / "README.md").read_text(encoding="utf-8")),
    }
    texts |= {f"{name}.tsv": table_text(columns, rows) for name, (columns, rows) in proposal.tables.items()}
    draft = study_dir / f".new-study.{os.getpid()}.part"
    try:
        for name, text in texts.items():
            write_text(draft / "config" / name, text)
        for name, target in proposal.links.items():
            place = draft / name
            place.parent.mkdir(parents=True, exist_ok=True)
            # The link is made in the draft and must lead to its target from its place in the study.
            place.symlink_to(os.path.relpath(target, (study_dir / name).parent))
        refuse_existing(study_dir, parts)
        for part in parts:
            (draft / part).rename(study_dir / part)
    finally:
        shutil.rmtree(draft, ignore_errors=True)
