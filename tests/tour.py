"""Follow README.md as a newcomer would: a fresh clone, and every printed command in its order.

A block marked `sh` holds commands; a block marked `text` shows lines that the commands just before it print (a line
`...` stands for others); blocks marked otherwise, or not at all, hold the content of files. A comment
`# exit code N: ...` behind a command says that it ends so.
"""

import importlib.util
import json
import os
import re
import shutil
import subprocess
import sys
import time
from dataclasses import dataclass
from pathlib import Path

REPOSITORY = Path(__file__).resolve().parents[1]
BUILDS = "EVENBLUR_TOUR_BUILDS"
"""Set to 1, the environment is built as a newcomer's; otherwise this Python's is lent to the clone."""

COMMANDS, SHOWN = "sh", "text"
PLACES = {"path/to/study": "../pool/study", "STUDY": "../pool/study"}
"""Where the words that stand for a reader's own study lead: to the study of the README's example."""

INSTEAD = (
    (r"scripts/start\.py test\b", " -- --collect-only -q", "a test cannot run the tests that it is one of"),
    (
        r"--profile|--executor|\s-e\s",
        " --dry-run",
        "there is no cluster to send jobs to; the dry run reads the profile",
    ),
)
"""Commands that are run with something added, and why."""

_PROGRAMS = (
    r"(\$ )?(sudo |env )?(python3?|\.venv/bin/|pip|git|cd|ls|cp|mv|echo|cat|awk|sed|snakemake|sbatch|apt|export)\b"
)


@dataclass(frozen=True)
class Block:
    """A fenced block: its mark, its lines, and the line of the page that it begins at."""

    mark: str
    lines: tuple[str, ...]
    place: int


@dataclass(frozen=True)
class Step:
    """A printed command: as it stands, as it is run, the exit code that it shall have, its line on the page."""

    printed: str
    run: str
    code: int
    place: int


@dataclass(frozen=True)
class Done:
    """A step that was run: its exit code, what it printed, how long it took."""

    step: Step
    code: int
    text: str
    seconds: float


def blocks(page: str) -> list[Block]:
    """The fenced blocks of a page."""
    found: list[Block] = []
    inside: tuple[str, int] | None = None
    lines: list[str] = []
    for number, line in enumerate(page.splitlines(), start=1):
        fence = re.match(r"\s*```(\S*)", line)
        if fence and inside is None:
            inside, lines = (fence.group(1), number), []
        elif fence and inside is not None:
            found.append(Block(inside[0], tuple(lines), inside[1]))
            inside = None
        elif inside is not None:
            lines.append(line.strip() if inside[0] in (COMMANDS, SHOWN) else line)
    if inside is not None:
        raise ValueError(f"the block of line {inside[1]} has no end")
    return found


def unmarked_commands(page: str) -> list[str]:
    """Lines that look like commands and stand in a block that is not marked as one."""
    return [
        f"line {block.place}: {line}"
        for block in blocks(page)
        if block.mark not in (COMMANDS, SHOWN, "python", "yaml")
        for line in block.lines
        if re.match(_PROGRAMS, line)
    ]


def steps(block: Block) -> list[Step]:
    """The commands of a block, with what is put in for a reader's own study and for what a test cannot do."""
    found = []
    for line in "\n".join(block.lines).replace("\\\n", " ").splitlines():
        if not line or line.startswith("#"):
            continue
        command, _, comment = line.partition("  # ") if "  # " in line else (line, "", "")
        code = re.search(r"exit code (\d+)", comment)
        run = command.strip()
        for word, place in PLACES.items():
            run = re.sub(rf"(?<![\w/]){re.escape(word)}(?![\w])", place, run)
        for pattern, added, _ in INSTEAD:
            run += added if re.search(pattern, run) else ""
        found.append(Step(line, run, int(code.group(1)) if code else 0, block.place))
    return found


def fresh_clone(folder: Path) -> Path:
    """Clone the repository as it would be if all of its present files were committed."""
    if not (REPOSITORY / ".git").exists():
        hidden = shutil.ignore_patterns(
            ".git", ".venv", "__pycache__", ".*_cache", ".snakemake", "results", ".evenblur"
        )
        return Path(shutil.copytree(REPOSITORY, folder, ignore=hidden))
    subprocess.run(["git", "clone", "--quiet", str(REPOSITORY), str(folder)], check=True)
    listed = ["git", "-C", str(REPOSITORY), "ls-files", "-z", "--modified", "--others", "--exclude-standard"]
    for name in subprocess.run(listed, capture_output=True, text=True, check=True).stdout.split("\0"):
        source, target = REPOSITORY / name, folder / name
        if name and source.is_file():
            target.parent.mkdir(parents=True, exist_ok=True)
            shutil.copy(source, target)
        elif name:
            target.unlink(missing_ok=True)
    return folder


def lend_environment(clone: Path) -> None:
    """Let the clone use the packages of this Python: links in its .venv, and a stamp of its own."""
    (clone / ".venv").mkdir()
    for entry in Path(sys.prefix).iterdir():
        if entry.name != "evenblur.json":
            (clone / ".venv" / entry.name).symlink_to(entry)
    specification = importlib.util.spec_from_file_location("start_of_clone", clone / "scripts" / "start.py")
    assert specification is not None
    assert specification.loader is not None
    start = importlib.util.module_from_spec(specification)
    specification.loader.exec_module(start)
    environment = start.Environment(clone)
    environment.stamp.write_text(json.dumps(environment.wanted_stamp("develop")) + "\n", encoding="utf-8")


def newcomer(folder: Path) -> dict[str, str]:
    """The environment variables of a newcomer whose python3 is the Python that this one comes from."""
    programs = folder / "bin"
    programs.mkdir()
    base = getattr(sys, "_base_executable", None) or sys.executable
    (programs / "python3").write_text(f'#!/bin/sh\nexec "{base}" "$@"\n', encoding="utf-8")
    (programs / "python3").chmod(0o755)
    ways = ("PIP_", "LANG", "LC_", "TMP", "SSL_", "HTTP", "NO_PROXY")
    kept = {name: value for name, value in os.environ.items() if name.upper().startswith(ways)}
    return {**kept, "HOME": str(folder), "PATH": f"{programs}:{os.environ['PATH']}", "GIT_CONFIG_COUNT": "0"}


def follow(step: Step, clone: Path, environment: dict[str, str]) -> Done:
    """Run one command in the clone."""
    begun = time.monotonic()
    done = subprocess.run(
        ["bash", "-c", step.run],
        cwd=clone,
        env=environment,
        stdin=subprocess.DEVNULL,
        stdout=subprocess.PIPE,
        stderr=subprocess.STDOUT,
        text=True,
        errors="replace",
        check=False,
        timeout=1800,
    )
    return Done(step, done.returncode, done.stdout, time.monotonic() - begun)
