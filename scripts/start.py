#!/usr/bin/env python3
"""The way in: `start.py demo`, `start.py new STUDY`, `start.py run STUDY`, `start.py test`.

Builds the program's own environment in `.venv` once, then runs Snakemake or the tests in it. This file parses on
Python 3.6 and imports the standard library only, so that an old Python is told so in one line. Exit codes: 0 done,
1 the run, the tests or the installation failed, 2 the call or the study folder has to be mended.
"""

import csv
import hashlib
import importlib
import json
import os
import platform
import re
import shutil
import signal
import subprocess
import sys
import time
from collections import Counter
from pathlib import Path
from types import ModuleType
from typing import IO

OLDEST_PYTHON = (3, 11)
REPOSITORY = Path(__file__).resolve().parent.parent
STAMP_NAME = "evenblur.json"
LOG_NAME = "install.log"
CODE_TO_MEND = 2

USAGE = """usage: start.py COMMAND

  demo [ARGUMENTS]         run the demonstration study, which is the program's own folder
  run STUDY [ARGUMENTS]    run a study; ARGUMENTS go to Snakemake: a target (check, plan, audit,
                           handover), -n for a dry run, --cores N (all cores unless said otherwise)
  new STUDY [ARGUMENTS]    begin a study; ARGUMENTS say what from: --from-bids BIDS, --from-dicom DIR (--help lists all)
  example FOLDER           make a small BIDS data set of three invented sites, to try `new` on
  test [quick] [-- ARGUMENTS]
                           run the tests; quick leaves out whole scenarios; ARGUMENTS go to pytest
"""


class StartError(Exception):
    """Ends the command with one line for the user and an exit code."""

    def __init__(self, line: str, code: int) -> None:
        super().__init__(line)
        self.code = code


# --- Python and the environment ---------------------------------------------------------------------------------


def check_python(version: "tuple[int, ...]") -> None:
    """Stop with one line when Python is too old or cannot make virtual environments."""
    if tuple(version[:2]) < OLDEST_PYTHON:
        raise StartError(
            "Evenblur needs Python {}.{} or newer, and this is Python {}.{}; start it with a newer one, "
            "for example: python3.12 scripts/start.py demo".format(*OLDEST_PYTHON, *version[:2]),
            CODE_TO_MEND,
        )
    try:
        import ensurepip  # noqa: F401, PLC0415 - Debian's Python has venv, but no ensurepip, until python3-venv is installed
        import venv  # noqa: F401, PLC0415
    except ImportError as error:
        raise StartError(
            f"this Python ({sys.executable}) lacks the module {error.name} that makes virtual environments; "
            "install it (Debian and Ubuntu: apt install python3-venv) and start again",
            CODE_TO_MEND,
        ) from error


class Environment:
    """The virtual environment in the repository, and the stamp that says what it was built from."""

    def __init__(self, repository: Path) -> None:
        self.repository = repository
        self.folder = repository / ".venv"
        self.python = self.folder / "bin" / "python"
        self.stamp = self.folder / STAMP_NAME
        self.log = self.folder / LOG_NAME

    def pins(self, name: str) -> Path:
        """The file of pinned packages: `run` or `develop`."""
        return self.repository / "envs" / (name + ".txt")

    def wanted_stamp(self, name: str) -> "dict[str, str]":
        """What the stamp of an environment with these pins says."""
        return {
            "pins": name,
            "sha256": hashlib.sha256(self.pins(name).read_bytes()).hexdigest(),
            "python": f"{platform.python_implementation()} {platform.python_version()} {platform.machine()}",
            "location": str(self.folder),
        }

    def is_valid(self, name: str) -> bool:
        """Whether the environment was built, to its end, from the present pins, here, with this Python."""
        try:
            found = json.loads(self.stamp.read_text(encoding="utf-8"))
        except (OSError, ValueError):
            return False
        return found == self.wanted_stamp(name) and os.access(str(self.python), os.X_OK)

    def satisfies(self, name: str) -> bool:
        """Whether the environment serves: the develop pins hold the run pins."""
        return self.is_valid(name) or (name == "run" and self.is_valid("develop"))

    def require(self, name: str) -> None:
        """Build the environment unless it serves; only one start builds at a time."""
        if self.satisfies(name):
            return
        with BuildLock(self.repository):
            if not self.satisfies(name):
                self.build(name)

    def build(self, name: str) -> None:
        """Make the environment anew, or add the develop pins to a valid one; the stamp is written last."""
        stamp = self.wanted_stamp(name)
        try:
            if name == "develop" and self.is_valid("run"):
                print("Adding the developers' packages to .venv (once; a few minutes).", flush=True)
                self.stamp.unlink()
            else:
                print("Installing the program's packages into .venv (once; a few minutes).", flush=True)
                if self.folder.is_symlink():
                    self.folder.unlink()
                elif self.folder.exists():
                    shutil.rmtree(str(self.folder))
                self.folder.mkdir()
        except OSError as error:
            raise StartError(
                f"{self.folder} cannot be rebuilt ({error.strerror}); delete it and start again", 1
            ) from error
        # The base interpreter: `sys.executable` may be the very environment that was just deleted.
        base = getattr(sys, "_base_executable", None) or sys.executable
        with self.log.open("w", encoding="utf-8") as log:
            if not self.python.exists():
                self.call(log, [base, "-m", "venv", str(self.folder)], "the virtual environment could not be made")
            install = [str(self.python), "-m", "pip", "install", "--no-input", "--disable-pip-version-check"]
            install += ["--only-binary", ":all:", "--requirement", str(self.pins(name))]
            self.call(log, install, "the packages could not be installed")
        draft = self.stamp.with_name(self.stamp.name + ".part")
        draft.write_text(json.dumps(stamp, indent=2) + "\n", encoding="utf-8")
        draft.replace(self.stamp)

    def call(self, log: "IO[str]", command: "list[str]", failure: str) -> None:
        """Run one command of the installation with its output in the log; stop with one line if it fails."""
        try:
            code = subprocess.call(command, stdout=log, stderr=subprocess.STDOUT, stdin=subprocess.DEVNULL)
        except OSError as error:
            raise StartError(f"{failure}: {error}", 1) from error
        if code:
            raise StartError(f"{failure}; what went wrong stands in {self.log}", 1)


class BuildLock:
    """Holds other starts back while one builds the environment; a killed holder lets go by itself."""

    def __init__(self, repository: Path) -> None:
        self.repository = repository
        self.descriptor = -1

    def __enter__(self) -> None:
        """Wait for the lock; where the file system knows no locks, go on without."""
        try:
            import fcntl  # noqa: PLC0415 - not there on every system

            self.descriptor = os.open(str(self.repository), os.O_RDONLY)
            fcntl.flock(self.descriptor, fcntl.LOCK_EX)
        except (ImportError, OSError):
            pass

    def __exit__(self, *_: "object") -> None:
        """Let go."""
        if self.descriptor >= 0:
            os.close(self.descriptor)


# --- Running a study --------------------------------------------------------------------------------------------


class Narrator:
    """Turns Snakemake's output into one line a job in the words of the rules' messages; errors pass as they are."""

    NOISE = re.compile(
        r"^(\[\w{3} \w{3} +\d+ [\d:]+ \d{4}\]|Assuming unrestricted shared|Building DAG|Using shell|Provided cores"
        r"|Rules claiming more threads|Select jobs|Execute \d+ job|Finished job|Updating checkpoint|Elapsed time"
        r"|Group jobs: inactive|Removing temporary|Deactivating|Unlocking|Touching|Provided remote nodes|\s*$)"
    )
    BLOCK = re.compile(r"^(Job stats:|(local)?(rule|checkpoint) \w+:$)")
    INSIDE = re.compile(r"^(\s|job +count|-+ +-+|\w+ +\d+$)")

    def __init__(self, study: Path = Path()) -> None:
        self.study = study
        self.nothing_to_do = False
        self.log = ""
        self.inside = False
        self.done = 0
        self.total = 0
        self.began = time.monotonic()

    def view(self, line: str) -> "str | None":
        """What the user sees of one line, None for nothing."""
        if self.inside and self.INSIDE.match(line):
            total = re.match(r"total +(\d+)$", line)
            self.total = int(total.group(1)) if total else self.total
            return None
        self.inside = bool(self.BLOCK.match(line))
        if self.inside or self.NOISE.match(line) or self.note(line):
            return None
        job = re.match(r"Job \d+: (.*)", line)
        return f"[{self.done} of {self.total} done{self.left()}] {job.group(1)}" if job else line + self.said(line)

    def said(self, line: str) -> str:
        """What a failed job said last, where a line of Snakemake names its log."""
        named = re.match(r"    log: (.*?)(, .*)? \(check log file", line)
        if not named:
            return ""
        try:
            text = (self.study / named.group(1)).read_text(encoding="utf-8", errors="replace").strip()
        except OSError:
            return ""
        return f"\n    it said: {text.splitlines()[-1]}" if text else ""

    def left(self) -> str:
        """About how long the rest takes at the pace so far; nothing in the first seconds, which tell no pace."""
        passed = time.monotonic() - self.began
        if passed < 20 or self.done < 5:
            return ""
        seconds = passed * (self.total - self.done) / self.done
        if seconds < 90:
            return ", a minute left" if seconds > 30 else ", under a minute left"
        return f", about {seconds / 60:.0f} min left" if seconds < 5400 else f", about {seconds / 3600:.1f} h left"

    def note(self, line: str) -> bool:
        """Keep what a line says about the run as a whole; whether it was such a line."""
        progress = re.match(r"(\d+) of (\d+) steps", line)
        if progress:
            self.done, self.total = int(progress.group(1)), int(progress.group(2))
        elif line.startswith("Nothing to be done"):
            self.nothing_to_do = True
        elif line.startswith("Complete log(s): "):
            self.log = line.split(": ", 1)[1].strip()
        else:
            return False
        return True


def has_option(arguments: "list[str]", *names: str) -> bool:
    """Whether one of the options is among the arguments, also in the forms --name=value and -xVALUE."""
    return any(
        argument == name
        or argument.startswith(name + "=")
        or (len(name) == 2 and argument.startswith(name) and argument[2:].isalnum())
        for argument in arguments
        for name in names
    )


def check_place(arguments: "list[str]") -> None:
    """Stop with one line where a cluster's jobs could not start: they are handed the path of Python as it is."""
    cluster = library("calls").cluster_of(arguments)
    if cluster and re.search(r"\s", str(REPOSITORY)):
        raise StartError(
            f"{REPOSITORY}: jobs for {cluster} cannot start Python from a path with a space; move the program to a "
            "folder without one (the study may stay where it is) and start again",
            CODE_TO_MEND,
        )


def library(name: str) -> "ModuleType":
    """A module of the library that needs nothing installed, but a Python that is new enough: only now that is known."""
    scripts = str(REPOSITORY / "scripts")
    if scripts not in sys.path:
        sys.path.insert(0, scripts)
    return importlib.import_module(f"evenblur.{name}")


def run_lock() -> "ModuleType":
    """The library's module about locks."""
    return library("runlock")


def snakemake_command(python: Path, study: Path, arguments: "list[str]") -> "list[str]":
    """The whole call of Snakemake for a study."""
    command = [str(python), "-m", "snakemake", "--snakefile", str(REPOSITORY / "Snakefile"), "--keep-going"]
    # The default scheduler costs nine times as much a job in studies with thousands of scans.
    command += ["--scheduler", "greedy", "--scheduler-subsample", "50", "--rerun-incomplete"]
    # Of files over 1 MB Snakemake compares the dates by itself, and the audit of thousands of scans is larger.
    command += ["--max-checksum-file-size", "20000000"]
    # A profile or a cluster sets its own limits: `--cores` would cap the whole cluster at this computer's cores.
    if not has_option(arguments, "--cores", "-c", "--jobs", "-j", "--profile", "--executor", "-e"):
        command += ["--cores", "all"]
    if not run_lock().only_looks(arguments) and not has_option(arguments, "--quiet", "-q", "--verbose"):
        command += ["--quiet", "host", "reason"]
    return [*command, "--directory", str(study), *arguments]


def run_narrated(command: "list[str]", narrator: Narrator) -> int:
    """Run Snakemake and narrate it; an interrupt goes to Snakemake, which ends its jobs and then itself."""
    process = subprocess.Popen(
        command, stderr=subprocess.PIPE, stdin=subprocess.DEVNULL, universal_newlines=True, errors="replace"
    )
    signal.signal(signal.SIGTERM, lambda *_: process.terminate())
    signal.signal(signal.SIGINT, signal.SIG_IGN)  # the terminal sends it to Snakemake as well
    assert process.stderr is not None
    for line in process.stderr:
        seen = narrator.view(line.rstrip("\n"))
        if seen is not None:
            print(seen, file=sys.stderr, flush=True)
    return process.wait()


def results_folder(study: Path) -> Path:
    """The study's results folder, by the one key of study.yaml that says so (no YAML reader is there yet)."""
    text = (study / "config" / "study.yaml").read_text(encoding="utf-8", errors="replace")
    found = re.search(r"^results:[ \t]*([\"']?)([^\"'#\r\n]+?)\1[ \t]*(#.*)?$", text, flags=re.MULTILINE)
    return study / (found.group(2) if found else "results")


def count_words(table: Path, column: str) -> str:
    """How often each word stands in a column: `5 pass, 1 unproven`."""
    with table.open(encoding="utf-8", newline="") as rows:
        counts = Counter(row[column] for row in csv.DictReader(rows, delimiter="\t", quoting=csv.QUOTE_NONE))
    return ", ".join(f"{count} {word}" for word, count in sorted(counts.items())) or "none"


def held_reasons(table: Path) -> str:
    """Why scans are held, the most frequent reason first: ` (2 image_missing, 1 setup_changed)`, or nothing."""
    with table.open(encoding="utf-8", newline="") as rows:
        reasons = [row.get("reasons") or "" for row in csv.DictReader(rows, delimiter="\t", quoting=csv.QUOTE_NONE)]
    counts = Counter(reason for cell in reasons for reason in cell.split(";") if reason)
    words = ", ".join(f"{count} {word}" for word, count in sorted(counts.items(), key=lambda item: (-item[1], item[0])))
    return f" ({words})" if words else ""


def summary(study: Path) -> str:
    """The end of a finished run: periods by verdict, scans by status and reason, where the report is."""
    audit = results_folder(study) / "audit"
    return "Periods: {}.\nScans: {}{}.\nQueries, by who acts: {}; see {}\nReport: {}".format(
        count_words(audit / "sites.tsv", "verdict"),
        count_words(audit / "scans.tsv", "status"),
        held_reasons(audit / "scans.tsv"),
        count_words(audit / "queries.tsv", "who_acts"),
        audit / "queries.tsv",
        audit / "report.html",
    )


def plan_summary(path: Path) -> str:
    """The end of a run that made the plan: the target, how many scans, where the plan is."""
    plan = json.loads(path.read_text(encoding="utf-8"))
    target, counts = plan["target"], plan["counts"]
    widths = "none could be set"
    if target["in_plane_mm"] is not None:
        widths = "{:g} mm in-plane, {:g} mm axial".format(target["in_plane_mm"], target["axial_mm"])
    return "Target: {}.\nScans: {accepted} accepted, {held} held.\nPlan: {}\nWhat each target costs: {}".format(
        widths, path, path.with_suffix(".html"), **counts
    )


def check_study(study: Path) -> None:
    """Stop with one line unless the folder is a study that no other run holds."""
    if not (study / "config" / "study.yaml").is_file():
        raise StartError(
            f"{study}: there is no config/study.yaml in it; name the folder of a study (README.md shows one)",
            CODE_TO_MEND,
        )
    lock = run_lock().read_lock(study)
    if lock is not None and lock.alive:
        raise StartError(lock.sentence(study), CODE_TO_MEND)


def unlock(command: "list[str]", study: Path) -> None:
    """Remove Snakemake's own locks that a killed run left; our lock has shown that no run holds the study."""
    locks = study / ".snakemake" / "locks"
    if locks.is_dir() and any(locks.iterdir()):
        print("The last run was cut off: going on from where it stopped.", flush=True)
        done = subprocess.run([*command, "--unlock"], stdout=subprocess.PIPE, stderr=subprocess.STDOUT, check=False)
        if done.returncode:
            raise StartError(done.stdout.decode("utf-8", "replace").strip(), done.returncode)


def run(study: Path, arguments: "list[str]") -> int:
    """Run a study: environment, recovery, Snakemake, summary."""
    check_study(study)
    if not run_lock().only_looks(arguments):
        check_place(arguments)
    environment = Environment(REPOSITORY)
    environment.require("run")
    command = snakemake_command(environment.python, study, arguments)
    if run_lock().only_looks(arguments):
        return subprocess.call(command)
    audit = results_folder(study) / "audit"
    whole = library("calls").asks_for_all(arguments)
    mark = library("unchanged").Mark(study, REPOSITORY, audit.parent.relative_to(study).as_posix(), of_use=whole)
    if mark.stands():
        print(f"Nothing to do: the results in {audit.parent} are up to date.")
        return 0
    mark.begin()
    unlock(snakemake_command(environment.python, study, []), study)
    narrator = Narrator(study)
    code = run_narrated(command, narrator)
    if code == 0:
        mark.end()
    if code == CODE_TO_MEND:  # the workflow has said what has to be mended in the study
        return code
    if code:
        log = f"; the log is {narrator.log}" if narrator.log else ""
        if code < 0:
            print(f"The run of {study} was ended from outside (signal {-code}): start it again.", file=sys.stderr)
        else:
            print(f"The run of {study} failed{log}. What is done stays: mend and start again.", file=sys.stderr)
        return 1
    if narrator.nothing_to_do:
        print(f"Nothing to do: the results in {audit.parent} are up to date.")
    elif "plan" in arguments:
        print(plan_summary(audit.parent / "plan.json"))
    elif not {"check", "harmonise"} & set(arguments) and (audit / "report.html").is_file():
        print(summary(study))
    return 0


# --- Beginning a study ------------------------------------------------------------------------------------------


def step_command(script: str, arguments: "list[str]") -> int:
    """Call one of the program's commands in its own environment."""
    environment = Environment(REPOSITORY)
    environment.require("run")
    return subprocess.call([str(environment.python), str(REPOSITORY / "scripts" / script), *arguments])


# --- The tests --------------------------------------------------------------------------------------------------


def test(arguments: "list[str]") -> int:
    """Run the tests at a level with the developers' packages."""
    own, pytest_arguments = arguments, []
    if "--" in arguments:
        cut = arguments.index("--")
        own, pytest_arguments = arguments[:cut], arguments[cut + 1 :]
    if own not in ([], ["quick"]):
        raise StartError(
            "test {}: unknown; it is `test`, `test quick`, and pytest's own arguments after --".format(" ".join(own)),
            CODE_TO_MEND,
        )
    environment = Environment(REPOSITORY)
    environment.require("develop")
    command = [str(environment.python), "-m", "pytest"]
    if own:
        command += ["-m", "not slow and not browser and not cluster"]
    if not has_option(pytest_arguments, "-n", "--numprocesses"):
        command += ["-n", "auto", "--dist", "loadfile", "--no-loadscope-reorder"]  # a file shares its finished studies
    return subprocess.call(command + pytest_arguments, cwd=str(REPOSITORY))


def dispatch(arguments: "list[str]") -> int:
    """Carry out the command."""
    command, rest = (arguments[0], arguments[1:]) if arguments else ("", [])
    if command == "demo":
        return run(REPOSITORY, rest)
    if command == "run":
        if not rest or rest[0].startswith("-"):
            raise StartError("run: name the folder of the study: start.py run STUDY", CODE_TO_MEND)
        return run(Path(rest[0]).resolve(), rest[1:])
    if command in ("new", "example"):
        return step_command("new_study.py" if command == "new" else "make_example_bids.py", rest)
    if command == "test":
        return test(rest)
    asked = command in ("-h", "--help", "help")
    print(USAGE, end="", file=sys.stdout if asked else sys.stderr)
    return 0 if asked else CODE_TO_MEND


def main(arguments: "list[str]") -> int:
    """Check Python, carry out the command and turn what stops it into one line."""
    try:
        check_python(tuple(sys.version_info[:2]))
        return dispatch(arguments)
    except StartError as error:
        print(f"start.py: {error}", file=sys.stderr)
        return error.code
    except OSError as error:
        print(f"start.py: {error}; make room or mend the permissions and start again", file=sys.stderr)
        return 1
    except KeyboardInterrupt:
        print("start.py: interrupted", file=sys.stderr)
        return 130


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
