"""Kill runs at random points and see that the next run ends in the same bytes as an undisturbed one.

python tests/benchmarks/kill_points.py [--points 40] [--seed 1] [--cores 2]

Each point is a progress marker (so many files stand in the study folder) drawn from the seed, and what is killed:
the whole workflow with its jobs, the main process alone, or one job that runs at that moment. Then `start.py run`
takes the study up, and every result file is compared with those of an undisturbed run, as is the study's history.
Prints a line a point; exits 1 if any point left other bytes, a draft of a file or a run that fails.
"""

import argparse
import contextlib
import os
import random
import signal
import subprocess
import sys
import tempfile
import time
from collections import Counter
from pathlib import Path

sys.path[:0] = [
    str(Path(__file__).resolve().parents[1] / "workflow"),
    str(Path(__file__).resolve().parents[2] / "scripts"),
]

import small_study as small  # noqa: E402 - found by the lines above

START = small.PROGRAM / "scripts" / "start.py"
WAYS = ("workflow and jobs", "main process", "one job")
LONGEST_S = 300.0


def files_in(study_dir):
    """How many files a run has written so far, drafts among them."""
    count = 0
    for folder in ("results", ".evenblur", ".snakemake"):
        for _, _, names in os.walk(study_dir / folder):
            count += len(names)
    return count


def jobs_of(group):
    """Processes of a process group that run a step command."""
    found = []
    for folder in Path("/proc").iterdir():
        if folder.name.isdigit():
            with contextlib.suppress(OSError):
                fields = (folder / "stat").read_text().rpartition(")")[2].split()
                words = (folder / "cmdline").read_bytes().split(b"\0")
                step = any(b"/scripts/" in word and word.endswith(b".py") for word in words)
                if fields[2] == str(group) and step and b"-c" not in words:
                    found.append(int(folder.name))
    return found


def begin(study_dir, cores):
    """Start a run in a process group of its own."""
    call = small.command(study_dir, "--cores", str(cores))
    silent = {"stdout": subprocess.DEVNULL, "stderr": subprocess.DEVNULL}
    return subprocess.Popen(call, start_new_session=True, env=small.environment(), **silent)


def kill_at(study_dir, *, files, way, rng, cores=2):
    """Start a run and kill at a marker; says what was hit."""
    run = begin(study_dir, cores)
    end = time.monotonic() + LONGEST_S
    while run.poll() is None and files_in(study_dir) < files and time.monotonic() < end:
        time.sleep(0.002)
    if way == "one job":
        hit = []
        while run.poll() is None and not hit and time.monotonic() < end:
            hit = jobs_of(run.pid)
            time.sleep(0.002)
        if hit:
            time.sleep(rng.uniform(0.0, 0.6))  # somewhere in the job: its start takes most of a second
            with contextlib.suppress(ProcessLookupError):
                os.kill(rng.choice(hit), signal.SIGKILL)
        run.wait(timeout=LONGEST_S)
        return "job killed" if hit and run.returncode else "job had ended"
    if run.poll() is not None:
        return "run had ended"
    if way == "main process":
        os.kill(run.pid, signal.SIGKILL)
        run.wait()
        while jobs_of(run.pid) and time.monotonic() < end:  # its jobs go on to their end
            time.sleep(0.02)
        return "killed"
    os.killpg(run.pid, signal.SIGKILL)
    run.wait()
    return "killed"


def take_up(study_dir, cores=2):
    """Run the study again by the start script."""
    call = [sys.executable, START, "run", study_dir, "--cores", str(cores)]
    return subprocess.run(call, capture_output=True, text=True, check=False, env=small.environment())


def differences(study_dir, expected):
    """What is not as after an undisturbed run: names of files."""
    found = {**small.result_bytes(study_dir), "history.tsv": (study_dir / "history.tsv").read_bytes()}
    drafts = [str(path) for path in study_dir.rglob("*.part")]
    return sorted({name for name in found.keys() | expected.keys() if found.get(name) != expected.get(name)}) + drafts


def undisturbed(folder, cores=2):
    """A whole run: its results and history, and how many files it writes."""
    study_dir = small.make_study(folder)
    run = small.snakemake(study_dir, "--cores", str(cores))
    assert run.code == 0, run.text
    results = {**small.result_bytes(study_dir), "history.tsv": (study_dir / "history.tsv").read_bytes()}
    return results, files_in(study_dir)


def main():
    """Print a line a point."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--points", type=int, default=40)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--cores", type=int, default=2)
    options = parser.parse_args()
    rng = random.Random(options.seed)
    bad, hits = 0, Counter()
    with tempfile.TemporaryDirectory() as temporary:
        expected, total = undisturbed(Path(temporary) / "undisturbed", options.cores)
        for number in range(options.points):
            way, files = rng.choice(WAYS), rng.randrange(1, total)
            study_dir = small.make_study(Path(temporary) / f"study {number}")
            hit = kill_at(study_dir, files=files, way=way, rng=rng, cores=options.cores)
            again = take_up(study_dir, options.cores)
            wrong = differences(study_dir, expected) if again.returncode == 0 else [again.stderr[-300:]]
            hits[hit] += 1
            bad += bool(wrong)
            verdict = "same bytes" if not wrong else f"DIFFERENT: {wrong}"
            print(f"{number + 1:3d}  {way:18} at {files:3d} of {total} files  {hit:14} {verdict}", flush=True)
    print(f"{options.points - bad} of {options.points} ended in the same bytes; {dict(sorted(hits.items()))}")
    return 1 if bad else 0


if __name__ == "__main__":
    raise SystemExit(main())
