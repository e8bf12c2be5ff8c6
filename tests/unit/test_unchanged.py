"""The note that a run left nothing to do: it holds as long as nothing has moved, and not a moment longer."""

import os
import shutil
import time
from collections.abc import Callable
from pathlib import Path

import pytest

from evenblur.unchanged import is_marked, remove_mark, set_mark, state_after, state_before

RESULTS = "out/results"


def write(path: Path, text: str) -> None:
    """A file that settled long ago."""
    path.parent.mkdir(parents=True, exist_ok=True)
    path.write_text(text, encoding="utf-8")
    os.utime(path, (1_700_000_000, 1_700_000_000))


@pytest.fixture
def study(tmp_path: Path) -> Path:
    """A study whose images are partly links into an archive, with what a run leaves."""
    folder = tmp_path / "study"
    for name in ("config/study.yaml", "config/scans.tsv", "images/a.nii.gz", f"{RESULTS}/plan.json", "history.tsv"):
        write(folder / name, name)
    for name in (".snakemake/metadata/record", ".evenblur/provenance.txt", ".evenblur/history.json"):
        write(folder / name, name)
    (folder / ".snakemake" / "incomplete").mkdir()
    write(tmp_path / "archive" / "b.nii.gz", "b")
    write(tmp_path / "archive" / "series" / "1.dcm", "1")
    (folder / "images" / "b.nii.gz").symlink_to(tmp_path / "archive" / "b.nii.gz")
    (folder / "images" / "series").symlink_to(tmp_path / "archive" / "series")
    (folder / "images" / "round").symlink_to(folder / "images")
    return folder


@pytest.fixture
def program(tmp_path: Path) -> Path:
    folder = tmp_path / "program"
    for name in ("Snakefile", "scripts/evenblur/a.py", "workflow/rules/a.smk", "envs/run.txt", ".venv/evenblur.json"):
        write(folder / name, name)
    return folder


def states(study: Path, program: Path) -> tuple[str, str]:
    return state_before(study, program, RESULTS), state_after(study, RESULTS)


def test_the_note_stands_until_it_is_removed(study: Path, program: Path) -> None:
    before, after = states(study, program)
    assert not is_marked(study, before, after)
    set_mark(study, before, after)
    assert is_marked(study, *states(study, program))
    remove_mark(study)
    assert not is_marked(study, *states(study, program))
    remove_mark(study)


def test_a_damaged_or_empty_note_is_none(study: Path, program: Path) -> None:
    set_mark(study, *states(study, program))
    (study / ".evenblur" / "unchanged.json").write_text("{", encoding="utf-8")
    assert not is_marked(study, *states(study, program))
    set_mark(study, "", "")
    assert not is_marked(study, "", "")


def replace_alike(path: Path) -> None:
    """Other content of the same size under the same date."""
    date = path.stat().st_mtime_ns
    path.write_bytes(path.read_bytes()[::-1])
    os.utime(path, ns=(date, date))


MOVES: dict[str, Callable[[Path, Path], object]] = {
    "a table": lambda study, _: write(study / "config/scans.tsv", "other"),
    "a new table": lambda study, _: write(study / "config/regions.tsv", ""),
    "an image": lambda study, _: write(study / "images/a.nii.gz", "other"),
    "an image, same size and date": lambda study, _: replace_alike(study / "images/a.nii.gz"),
    "an image gone": lambda study, _: (study / "images/a.nii.gz").unlink(),
    "a sidecar that came": lambda study, _: write(study / "images/a.json", "{}"),
    "an image behind a link": lambda study, _: write(study.parent / "archive/b.nii.gz", "bb"),
    "a file behind a linked folder": lambda study, _: write(study.parent / "archive/series/2.dcm", "2"),
    "a link to nowhere": lambda study, _: (study.parent / "archive/b.nii.gz").unlink(),
    "a touched image": lambda study, _: os.utime(study / "images/a.nii.gz", (1_700_000_001, 1_700_000_001)),
    "a result": lambda study, _: write(study / RESULTS / "plan.json", "other"),
    "a result gone": lambda study, _: (study / RESULTS / "plan.json").unlink(),
    "a stray result": lambda study, _: write(study / RESULTS / "harmonised/.hidden", ""),
    "the history": lambda study, _: write(study / "history.tsv", "other"),
    "Snakemake's records": lambda study, _: shutil.rmtree(study / ".snakemake"),
    "one of Snakemake's records": lambda study, _: (study / ".snakemake/metadata/record").unlink(),
    "the head of the history": lambda study, _: (study / ".evenblur/history.json").unlink(),
    "code": lambda _, program: write(program / "scripts/evenblur/a.py", "other"),
    "a rule": lambda _, program: write(program / "workflow/rules/b.smk", ""),
    "packages": lambda _, program: write(program / "envs/run.txt", "other"),
    "the environment": lambda _, program: write(program / ".venv/evenblur.json", "other"),
}


@pytest.mark.parametrize("move", MOVES)
def test_whatever_moves_ends_it(study: Path, program: Path, move: str) -> None:
    set_mark(study, *states(study, program))
    MOVES[move](study, program)
    assert not is_marked(study, *states(study, program))


def test_another_copy_of_the_program_is_asked_anew(study: Path, program: Path) -> None:
    set_mark(study, *states(study, program))
    other = shutil.copytree(program, program.with_name("clone"))
    assert not is_marked(study, *states(study, other))


def test_logs_caches_and_locks_do_not_count(study: Path, program: Path) -> None:
    set_mark(study, *states(study, program))
    for folder, name in ((study, ".snakemake/log/1.log"), (study, ".evenblur/logs/x"), (study, ".evenblur/lock")):
        write(folder / name, "")
    write(program / "scripts/evenblur/__pycache__/a.pyc", "")
    write(program / "tests/test_a.py", "")
    assert is_marked(study, *states(study, program))


def test_a_file_of_this_moment_is_not_trusted(study: Path, program: Path) -> None:
    (study / "config" / "scans.tsv").touch()
    assert states(study, program)[0] == ""
    two_seconds_ago = time.time_ns() - 2_100_000_000
    os.utime(study / "config" / "scans.tsv", ns=(two_seconds_ago, two_seconds_ago))
    assert states(study, program)[0]


def test_what_cannot_be_looked_at_is_not_known(study: Path, program: Path) -> None:
    (study / "images" / "itself").symlink_to("itself")
    assert states(study, program)[0] == ""


def test_without_an_environment_nothing_is_known(study: Path, program: Path) -> None:
    (program / ".venv" / "evenblur.json").unlink()
    assert states(study, program)[0] == ""
