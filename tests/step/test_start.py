"""The start script: what it says about Python, when it builds the environment, how it runs a study."""

import contextlib
import importlib.util
import json
import os
import shutil
import signal
import subprocess
import sys
import time
from collections.abc import Iterator
from pathlib import Path
from types import ModuleType

import pytest

from evenblur.calls import asks_for_all, cluster_of

REPOSITORY = Path(__file__).resolve().parents[2]
START = REPOSITORY / "scripts" / "start.py"


def load_start(path: Path = START) -> ModuleType:
    """The script as a module, from a copy where one is given: it takes the folder above its own as the repository."""
    specification = importlib.util.spec_from_file_location("start_under_test", path)
    assert specification is not None
    assert specification.loader is not None
    module = importlib.util.module_from_spec(specification)
    specification.loader.exec_module(module)
    return module


@pytest.fixture
def copy(tmp_path: Path) -> Path:
    """A repository in a path with spaces: the start script, the run lock and pins files without a package."""
    repository = tmp_path / "a folder with spaces"
    (repository / "scripts" / "evenblur").mkdir(parents=True)
    (repository / "envs").mkdir()
    shutil.copy(START, repository / "scripts")
    for name in ("__init__.py", "calls.py", "runlock.py", "unchanged.py"):
        shutil.copy(REPOSITORY / "scripts" / "evenblur" / name, repository / "scripts" / "evenblur")
    for name in ("run", "develop"):
        (repository / "envs" / f"{name}.txt").write_text("# no package\n", encoding="utf-8")
    return repository


def call(repository: Path, *arguments: str, **environment: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [sys.executable, str(repository / "scripts" / "start.py"), *arguments],
        capture_output=True,
        text=True,
        check=False,
        timeout=300,
        env={**os.environ, **environment},
    )


def make_study(folder: Path, text: str = "study: {title: Test}\n") -> Path:
    (folder / "config").mkdir(parents=True)
    (folder / "config" / "study.yaml").write_text(text, encoding="utf-8")
    return folder


@pytest.mark.parametrize("version", [(3, 6), (3, 10)])
def test_old_python_is_told_the_version_that_is_needed(version: tuple[int, int]) -> None:
    start = load_start()
    with pytest.raises(start.StartError) as stopped:
        start.check_python(version)
    assert "needs Python 3.11 or newer" in str(stopped.value)
    assert f"this is Python {version[0]}.{version[1]}" in str(stopped.value)
    assert "\n" not in str(stopped.value)
    assert stopped.value.code == 2


@pytest.mark.parametrize("version", [(3, 11), (3, 12), (3, 13), (4, 0)])
def test_new_python_is_accepted(version: tuple[int, int]) -> None:
    load_start().check_python(version)


@pytest.mark.parametrize("module", ["venv", "ensurepip"])
def test_python_without_venv_is_told_so(module: str, monkeypatch: pytest.MonkeyPatch) -> None:
    start = load_start()
    monkeypatch.setitem(sys.modules, module, None)  # an import of it raises ModuleNotFoundError
    with pytest.raises(start.StartError, match="lacks the module") as stopped:
        start.check_python((3, 12))
    assert stopped.value.code == 2


@pytest.mark.parametrize("arguments", [("run",), ("run", "-n"), ("wrong",), (), ("test", "wrong")])
def test_wrong_call_is_refused(copy: Path, arguments: tuple[str, ...]) -> None:
    done = call(copy, *arguments)
    assert done.returncode == 2
    assert "start.py" in done.stderr
    assert not (copy / ".venv").exists()


def test_folder_without_study_is_refused_in_one_line(copy: Path, tmp_path: Path) -> None:
    done = call(copy, "run", str(tmp_path))
    assert done.returncode == 2
    assert done.stdout == ""
    assert done.stderr.count("\n") == 1
    assert f"{tmp_path}: there is no config/study.yaml" in done.stderr
    assert not (copy / ".venv").exists()


def test_study_that_a_live_run_holds_is_refused(copy: Path, tmp_path: Path) -> None:
    study = make_study(tmp_path / "study")
    locks = study / ".snakemake" / "locks"
    locks.mkdir(parents=True)
    (locks / "0.input.lock").touch()
    (study / ".evenblur").mkdir()
    # A run on another computer counts as alive.
    held = {"host": "another-computer", "process_id": 1, "started": "1"}
    (study / ".evenblur" / "lock").write_text(json.dumps(held), encoding="utf-8")
    done = call(copy, "run", str(study))
    assert done.returncode == 2
    assert done.stderr.count("\n") == 1
    assert "another-computer" in done.stderr
    assert [path.name for path in locks.iterdir()] == ["0.input.lock"]


def test_environment_is_built_once_and_again_when_its_stamp_no_longer_holds(copy: Path) -> None:
    start = load_start(copy / "scripts" / "start.py")
    environment = start.Environment(copy)
    environment.require("run")
    assert environment.is_valid("run")
    assert not environment.satisfies("develop")
    assert subprocess.run([environment.python, "-c", "import pip"], check=False).returncode == 0

    witness = environment.folder / "witness"
    witness.touch()
    environment.require("run")
    assert witness.exists()  # nothing was rebuilt

    environment.require("develop")
    assert witness.exists()  # packages are added to a valid environment
    assert environment.satisfies("develop")
    assert environment.satisfies("run")

    environment.pins("run").write_text("# other pins\n", encoding="utf-8")
    environment.pins("develop").write_text("# other pins\n", encoding="utf-8")
    assert not environment.satisfies("run")
    environment.require("run")
    assert not witness.exists()
    assert environment.is_valid("run")


@pytest.mark.parametrize("key", ["python", "location", "sha256"])
def test_stamp_of_another_python_place_or_pins_is_not_valid(copy: Path, key: str) -> None:
    environment = load_start(copy / "scripts" / "start.py").Environment(copy)
    (environment.folder / "bin").mkdir(parents=True)
    environment.python.symlink_to(sys.executable)
    stamp = environment.wanted_stamp("run")
    environment.stamp.write_text(json.dumps(stamp), encoding="utf-8")
    assert environment.is_valid("run")
    environment.stamp.write_text(json.dumps({**stamp, key: "other"}), encoding="utf-8")
    assert not environment.is_valid("run")


@pytest.mark.parametrize("damage", ["no stamp", "half a stamp", "no interpreter"])
def test_unfinished_or_damaged_environment_is_not_valid(copy: Path, damage: str) -> None:
    environment = load_start(copy / "scripts" / "start.py").Environment(copy)
    (environment.folder / "bin").mkdir(parents=True)
    environment.python.symlink_to(sys.executable)
    text = json.dumps(environment.wanted_stamp("run"))
    environment.stamp.write_text(text, encoding="utf-8")
    assert environment.is_valid("run")
    if damage == "no stamp":
        environment.stamp.unlink()
    elif damage == "half a stamp":
        environment.stamp.write_text(text[: len(text) // 2], encoding="utf-8")
    else:
        environment.python.unlink()
        environment.python.symlink_to(copy / "python-that-was-removed")
    assert not environment.is_valid("run")


def test_failing_installation_is_one_line_with_the_path_of_the_log(copy: Path, tmp_path: Path) -> None:
    study = make_study(tmp_path / "study")
    (copy / "envs" / "run.txt").write_text("a-package-that-is-nowhere==1.0\n", encoding="utf-8")
    empty = tmp_path / "no packages"
    empty.mkdir()
    # No index at all: pip looks into the empty folder only.
    done = call(copy, "run", str(study), PIP_NO_INDEX="1", PIP_FIND_LINKS=empty.as_uri())
    log = copy / ".venv" / "install.log"
    assert done.returncode == 1
    assert done.stderr.count("\n") == 1
    assert str(log) in done.stderr
    assert "a-package-that-is-nowhere" in log.read_text(encoding="utf-8")
    assert not (copy / ".venv" / "evenblur.json").exists()


@pytest.fixture
def workflow(copy: Path) -> Path:
    """The copy with a small workflow of its own, run by the Snakemake that runs these tests."""
    start = load_start(copy / "scripts" / "start.py")
    environment = start.Environment(copy)
    (environment.folder / "bin").mkdir(parents=True)
    # A link would lose the packages: an interpreter finds them by its own place.
    environment.python.write_text(f'#!/bin/sh\nexec "{sys.executable}" "$@"\n', encoding="utf-8")
    environment.python.chmod(0o755)
    environment.stamp.write_text(json.dumps(environment.wanted_stamp("run")), encoding="utf-8")
    (copy / "Snakefile").write_text(
        """
rule all:
    input: "results/audit/report.html"
rule smooth:
    output: "results/{scan}.txt"
    log: "logs/{scan}.log"
    message: "Smoothing scan {wildcards.scan}"
    shell:
        "test ! -e fail_{wildcards.scan}; touch started_{wildcards.scan}; "
        "if [ -e wait_{wildcards.scan} ]; then until [ -e go ]; do sleep 0.05; done; fi; "
        "echo {wildcards.scan} > {output}"
rule audit:
    input: "results/one.txt", "results/two.txt"
    output: expand("results/audit/{name}", name=["report.html", "sites.tsv", "scans.tsv", "queries.tsv"])
    message: "Writing the audit"
    shell:
        "printf 'setup\\\\tverdict\\\\na\\\\tpass\\\\nb\\\\tunproven\\\\nc\\\\tpass\\\\n' > {output[1]}; "
        "printf 'subject\\\\tstatus\\\\treasons\\\\n1\\\\taccepted\\\\t\\\\n' > {output[2]}; "
        "printf '2\\\\theld\\\\timage_zero\\\\n' >> {output[2]}; "
        "touch {output[0]}; "
        "printf 'code\\\\twho_acts\\\\nx\\\\tsite\\\\n' > {output[3]}"
""",
        encoding="utf-8",
    )
    return copy


def test_run_tells_each_job_then_the_summary_and_a_second_run_has_nothing_to_do(workflow: Path, tmp_path: Path) -> None:
    study = make_study(tmp_path / "my study")
    done = call(workflow, "run", str(study), "--cores", "1")
    assert done.returncode == 0, done.stderr
    assert sorted(line.partition("] ")[2] for line in done.stderr.splitlines()) == [
        "Smoothing scan one",
        "Smoothing scan two",
        "Writing the audit",
    ]
    assert done.stderr.splitlines()[-1] == "[2 of 4 done] Writing the audit"
    report = study / "results" / "audit" / "report.html"
    queries = report.with_name("queries.tsv")
    assert done.stdout == (
        "Periods: 2 pass, 1 unproven.\nScans: 1 accepted, 1 held (1 image_zero).\n"
        f"Queries, by who acts: 1 site; see {queries}\nReport: {report}\n"
    )

    again = call(workflow, "run", str(study))
    assert again.returncode == 0, again.stderr
    assert again.stderr == ""
    assert again.stdout == f"Nothing to do: the results in {study / 'results'} are up to date.\n"


def test_failed_run_names_the_job_and_the_log_and_finishes_the_others(workflow: Path, tmp_path: Path) -> None:
    study = make_study(tmp_path / "my study")
    (study / "fail_one").touch()
    done = call(workflow, "run", str(study), "--cores", "1")
    assert done.returncode == 1
    assert "Error in rule smooth" in done.stderr
    last = done.stderr.splitlines()[-1]
    log = last.partition("the log is ")[2].partition(". What is done")[0]
    assert Path(log).is_file()
    assert (study / "results" / "two.txt").read_text(encoding="utf-8") == "two\n"


@pytest.fixture
def running(workflow: Path, tmp_path: Path) -> Iterator[tuple[subprocess.Popen[str], Path]]:
    """A run, in a process group of its own, in the middle of a job that ends when `go` is there."""
    study = make_study(tmp_path / "my study")
    (study / "wait_one").touch()
    process = subprocess.Popen(
        [sys.executable, str(workflow / "scripts" / "start.py"), "run", str(study), "--cores", "1"],
        start_new_session=True,
        stdout=subprocess.PIPE,
        stderr=subprocess.STDOUT,
        text=True,
    )
    wait_for(study / "started_one")
    yield process, study
    with contextlib.suppress(ProcessLookupError):
        os.killpg(process.pid, signal.SIGKILL)
    process.communicate()


def wait_for(path: Path) -> None:
    deadline = time.monotonic() + 120  # far beyond a start of Snakemake, about 2 s
    while not path.exists():
        assert time.monotonic() < deadline, f"{path} did not come"
        time.sleep(0.05)


def test_run_after_a_kill_goes_on_from_where_it_stopped(
    running: tuple[subprocess.Popen[str], Path], workflow: Path
) -> None:
    process, study = running
    os.killpg(process.pid, signal.SIGKILL)
    process.wait()
    assert list((study / ".snakemake" / "locks").iterdir())
    (study / "wait_one").unlink()
    done = call(workflow, "run", str(study), "--cores", "1")
    assert done.returncode == 0, done.stderr
    assert done.stdout.startswith("The last run was cut off: going on from where it stopped.\nPeriods: 2 pass")
    assert (study / "results" / "one.txt").read_text(encoding="utf-8") == "one\n"


def test_terminated_run_ends_its_running_job_and_leaves_no_locks(
    running: tuple[subprocess.Popen[str], Path],
) -> None:
    process, study = running
    process.terminate()
    with pytest.raises(subprocess.TimeoutExpired):
        process.wait(timeout=1)  # it waits for the job, which waits for us
    (study / "go").touch()
    output, _ = process.communicate(timeout=120)
    assert process.returncode == 1, output
    assert "What is done stays" in output
    assert (study / "results" / "one.txt").exists() or (study / "results" / "two.txt").exists()
    assert not (study / ".snakemake" / "locks").exists()


def test_dry_run_changes_nothing(workflow: Path, tmp_path: Path) -> None:
    study = make_study(tmp_path / "my study")
    done = call(workflow, "run", str(study), "-n")
    assert done.returncode == 0, done.stderr
    assert "smooth" in done.stdout
    assert not (study / "results").exists()


def logs(study: Path) -> set[str]:
    """Snakemake writes one a call."""
    return {path.name for path in (study / ".snakemake" / "log").iterdir()}


def let_settle() -> None:
    """A file that is younger than two seconds may change again under the same date."""
    time.sleep(2.1)


def test_after_a_whole_run_nothing_is_asked_until_something_moves(workflow: Path, tmp_path: Path) -> None:
    study = make_study(tmp_path / "my study")
    assert call(workflow, "run", str(study), "--cores", "1").returncode == 0
    let_settle()  # this workflow writes beside its results, which counts as a move
    assert call(workflow, "run", str(study)).returncode == 0
    asked = logs(study)

    for arguments in ([], ["--cores", "2"], ["-c1"]):
        again = call(workflow, "run", str(study), *arguments)
        assert (again.returncode, again.stderr) == (0, "")
        assert again.stdout == f"Nothing to do: the results in {study / 'results'} are up to date.\n"
    assert logs(study) == asked

    (study / "results" / "audit" / "report.html").unlink()
    assert "Writing the audit" in call(workflow, "run", str(study)).stderr
    assert logs(study) > asked


@pytest.mark.parametrize(
    ("arguments", "all_of_it"),
    [
        ([], True),
        (["--cores", "2"], True),
        (["--cores=all"], True),
        (["-c4"], True),
        (["plan"], False),
        (["--cores", "2", "--force"], False),
        (["--rerun-triggers", "mtime"], False),
        (["--config", "site=quay"], False),
        (["--profile", "mine"], False),
    ],
)
def test_only_an_ordinary_call_for_everything_may_go_without_asking(arguments: list[str], all_of_it: bool) -> None:
    assert asks_for_all(arguments) is all_of_it


def test_settings_from_outside_are_always_asked_about(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("SNAKEMAKE_PROFILE", "mine")
    assert not asks_for_all([])


def test_what_changes_while_a_run_works_is_seen_by_the_next(
    running: tuple[subprocess.Popen[str], Path], workflow: Path
) -> None:
    process, study = running
    (study / "config" / "study.yaml").write_text("study: {title: Tess}\n", encoding="utf-8")
    (study / "go").touch()
    output, _ = process.communicate(timeout=120)
    assert process.returncode == 0, output
    asked = logs(study)
    assert "Nothing to do" in call(workflow, "run", str(study)).stdout
    assert logs(study) > asked


def test_a_failed_run_leaves_no_note_that_nothing_is_to_be_done(workflow: Path, tmp_path: Path) -> None:
    study = make_study(tmp_path / "my study")
    (study / "fail_one").touch()
    let_settle()
    assert call(workflow, "run", str(study), "--cores", "1").returncode == 1
    assert call(workflow, "run", str(study), "--cores", "1").returncode == 1


@pytest.mark.parametrize(
    ("arguments", "cluster"),
    [
        (["--executor", "slurm"], "slurm"),
        (["--executor=slurm"], "slurm"),
        (["-e", "slurm"], "slurm"),
        (["--profile", str(REPOSITORY / "workflow" / "profiles" / "slurm")], "slurm"),
        (["--executor", "local"], ""),
        (["--cores", "2", "plan"], ""),
    ],
)
def test_a_cluster_is_seen_in_the_call_and_in_the_profile(arguments: list[str], cluster: str) -> None:
    assert cluster_of(arguments) == cluster


def test_a_cluster_is_refused_in_one_line_where_the_programs_path_has_a_space(workflow: Path, tmp_path: Path) -> None:
    study = make_study(tmp_path / "study")
    done = call(workflow, "run", str(study), "--executor", "slurm")
    assert done.returncode == 2
    assert len(done.stderr.splitlines()) == 1
    assert "move the program to a folder without one" in done.stderr
    assert not (study / ".snakemake").exists()


@pytest.mark.parametrize(
    ("arguments", "cores"),
    [
        ([], ["all"]),
        (["plan"], ["all"]),
        (["--cores", "3"], ["3"]),
        (["--cores=3"], []),
        (["-c3"], []),
        (["--jobs", "20"], []),
        (["--profile", "cluster"], []),
    ],
)
def test_cores_are_all_unless_the_call_says_how_many(arguments: list[str], cores: list[str]) -> None:
    command = load_start().snakemake_command(Path("python"), Path("study"), arguments)
    assert [command[place + 1] for place, word in enumerate(command) if word == "--cores"] == cores
    assert command[-len(arguments) :] == arguments or not arguments
    assert command[command.index("--scheduler") + 1] == "greedy"
    assert command[command.index("--scheduler-subsample") + 1] == "50"
    # 2,500 scans have 6.3 MB of report and 1.9 MB of data (tests/benchmarks/report_size.py).
    assert int(command[command.index("--max-checksum-file-size") + 1]) > 2 * 6.3e6


@pytest.mark.parametrize(
    ("line", "folder"),
    [
        ("", "results"),
        ("results: results", "results"),
        ("results: out put  # a note", "out put"),
        ('results: "a b"', "a b"),
        ("results: 'x'", "x"),
        ("study:\n  results: inner", "results"),
    ],
)
def test_results_folder_is_the_one_of_the_study_file(tmp_path: Path, line: str, folder: str) -> None:
    study = make_study(tmp_path / "study", f"demo: false\n{line}\ntarget: {{choose: coarsest}}\n")
    assert load_start().results_folder(study) == study / folder


@pytest.mark.parametrize(("command", "script"), [("new", "new_study.py"), ("example", "make_example_bids.py")])
def test_a_study_is_begun_by_the_programs_own_command_and_environment(copy: Path, command: str, script: str) -> None:
    # In place of the command: it tells how it was called and ends as it was told.
    told = "import sys\nprint(sys.executable, sys.argv[1:])\nsys.exit(int(sys.argv[-1]))\n"
    (copy / "scripts" / script).write_text(told, encoding="utf-8")
    done = call(copy, command, "a study", "--from-bids", "some where", "2")
    assert done.returncode == 2
    assert f"{copy / '.venv' / 'bin' / 'python'} ['a study', '--from-bids', 'some where', '2']" in done.stdout
