"""What a study of thousands of scans costs before any scan is smoothed: time and memory of the workflow itself.

python tests/benchmarks/study_size.py [--scans 1000 5000 20000] [--jobs 50 450] [--keep FOLDER]

Makes an invented study with one setup, one phantom and one phantom session a hundred scans. Scans are distinct images
of 8 x 8 x 8 voxels, so that the library smooths all of them in one process within minutes: what is measured here does
not depend on the images' size. The finished study is made by the library's own functions, recorded by Snakemake's
`--touch`, and must then have nothing to do. Printed for each number of scans, as seconds on the wall and of the
processor (which other work on the computer disturbs less) and peak MB of memory:

dry     a dry run of the fresh study, before anything is there
look    a run of the finished study in which Snakemake looks at everything and finds nothing to do
idle    `start.py run` once more: nothing moved since, so Snakemake is not asked
job     seconds a job, of a forced run of some scans in which a shell script stands for the smoothing: the difference
        between a run of many and one of few, divided by the difference of their jobs
one     `start.py run` after one scan was replaced, up to report and bag

Growth is stated as the exponent of the processor's seconds between the smallest and the largest study.
"""

import argparse
import json
import math
import multiprocessing
import os
import shutil
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import numpy as np
from isal import igzip

PROGRAM = Path(__file__).resolve().parents[2]
sys.path[:0] = [str(PROGRAM / "scripts"), str(PROGRAM / "tests" / "workflow")]

import small_study as small  # noqa: E402
from evenblur.achieving import achieved_width  # noqa: E402
from evenblur.command import write_record  # noqa: E402
from evenblur.images.harmonise import harmonise_scan  # noqa: E402
from evenblur.images.nibabel_alone import nib  # noqa: E402
from evenblur.intake import take_in_image  # noqa: E402
from evenblur.measuring import measure_phantom  # noqa: E402
from evenblur.plan.planning import make_plan  # noqa: E402
from evenblur.study.ledger import Ledger  # noqa: E402
from evenblur.study.proving import proving_inputs  # noqa: E402
from evenblur.study.reading import load_study  # noqa: E402
from evenblur.study.records import Layout, read_plan_inputs  # noqa: E402
from evenblur.study.tasks import Tasks  # noqa: E402

SCANS_A_SETUP = 100
VOXEL_MM = (2.0, 2.0, 2.5, 1.0)
"""The phantom's: a scan on another grid would be held."""
STUB = """#!/bin/sh
while [ $# -gt 0 ]; do
    case "$1" in --out | --record) cp -p "{kept}/${{2##*/}}" "$2" ;; esac
    shift
done
"""
TOUCH = """
import snakemake.executors.touch
from snakemake.cli import main
snakemake.executors.touch.Executor.SLEEPING_TIME = 0  # it waits a tenth of a second a job
main()
"""


def label(number):
    """The setup's label: letters first."""
    return f"cam{number:05d}"


def save_scan(path, number):
    """A distinct small scan."""
    values = np.full((8, 8, 8), 100, np.int16)
    values.flat[:4] = [number % 30000, number // 30000, 500, 700]
    header = nib.Nifti1Image(values, np.diag(VOXEL_MM)).header
    header["vox_offset"] = 352
    with igzip.open(path, "wb", 1) as stream:
        stream.write(header.binaryblock + bytes(4) + values.tobytes(order="F"))
    os.utime(path, (1_700_000_000, 1_700_000_000))


def make_study(folder, scans):
    """Write the tables and the images of a study."""
    for name in ("config", "images/phantoms"):
        (folder / name).mkdir(parents=True)
    (folder / "config/study.yaml").write_text(small.SETTINGS)
    setups = [label(number) for number in range(math.ceil(scans / SCANS_A_SETUP))]
    small.write_table(folder / "config/setups.tsv", "setup site", [[s, f"site{i // 4}"] for i, s in enumerate(setups)])
    first = folder / "images/phantoms/first.nii.gz"
    small.save(first, small.phantom_volume("quay-1"))
    rows = []
    for setup in setups:
        name = f"images/phantoms/{setup}.nii.gz"
        os.link(first, folder / name)
        rows.append([f"{setup}-points", setup, "p1", "2026-01-10", "point_source", name, "{source_diameter_mm: 0}"])
    small.write_table(folder / "config/phantoms.tsv", small.PHANTOM_COLUMNS, rows)
    rows = []
    for number in range(scans):
        name = f"images/{number // SCANS_A_SETUP}/s{number:06d}.nii.gz"
        (folder / name).parent.mkdir(exist_ok=True)
        save_scan(folder / name, number)
        rows.append([f"s{number:06d}", "base", setups[number // SCANS_A_SETUP], "2026-02-01", name])
    small.write_table(folder / "config/scans.tsv", small.SCAN_COLUMNS, rows)
    return folder


def finish(folder):
    """Write what the steps up to the audit write, by the library, and let Snakemake record it as its own."""
    os.chdir(folder)
    study = load_study(folder)
    ledger = Ledger(folder)
    tasks = Tasks(study, ledger, folder, PROGRAM)
    tasks.look_at_images()
    layout = Layout(study)
    with multiprocessing.Pool(2, _prepare, (folder,)) as pool:
        pool.map(_take_in, [("scan", row.entities) for row in study.scans], chunksize=100)
        pool.map(_take_in, [("phantom", row.phantom) for row in study.phantoms])
        pool.map(_measure, [row.phantom for row in study.phantoms])
        write_record(Path(layout.plan), make_plan(study, **read_plan_inputs(folder, study)))
        plan = tasks.plan(layout.plan)
        pool.map(_smooth, [row.entities for row in tasks.accepted(layout.plan)], chunksize=100)
        pool.map(_prove, [(p["setup"], p["phantom_session"]) for p in plan["periods"]])
    fast = ["--cores", "2", "--scheduler", "greedy", "--scheduler-subsample", "50", "--quiet", "all"]
    where = ["--snakefile", PROGRAM / "Snakefile", "--directory", folder]
    for targets in (["--touch", "plan"], ["--touch"]):
        subprocess.run([sys.executable, "-c", TOUCH, *where, *fast, *targets], check=True)
    subprocess.run([sys.executable, "-m", "snakemake", *where, *fast], check=True)


_OF: dict[str, Tasks] = {}


def _prepare(folder):
    """The study, once in each process of the pool."""
    os.chdir(folder)
    _OF["tasks"] = Tasks(load_study(folder), Ledger(folder, look=False), folder, PROGRAM)


def _take_in(what):
    item, key = what
    tasks = _OF["tasks"]
    row = tasks.scans[key] if item == "scan" else tasks.phantoms[key]
    given = tasks.intake_settings(f"{item}s", key)
    found = take_in_image(
        Path(row.image), name=row.image, item=item, key=key, expected_sha256=given["expected"] or None
    )
    write_record(Path(tasks.layout.intake(row)), found)


def _measure(phantom):
    tasks = _OF["tasks"]
    given = tasks.resolution_settings(phantom)
    labels = {name: given[name] for name in ("phantom", "setup", "phantom_session")}
    kind, details = given["kind"], tasks.phantoms[phantom].details
    found = measure_phantom(Path(given["image"]), kind=kind, details=details, labels=labels, tolerant=True)
    write_record(Path(tasks.layout.resolution(phantom)), found)


def _smooth(entities):
    tasks = _OF["tasks"]
    given, row = tasks.smoothing_settings(entities, tasks.layout.plan), tasks.scans[entities]
    out = Path(tasks.layout.harmonised_image(row))
    out.parent.mkdir(parents=True, exist_ok=True)
    harmonise_scan(
        Path(row.image),
        in_plane_mm=given["in_plane_mm"],
        axial_mm=given["axial_mm"],
        out=out,
        record=Path(tasks.layout.scan_record(row)),
        expected_sha256=given["expected"],
        facts=json.loads(given["facts"]),
        code_token=given["code"],
    )


def _prove(period):
    tasks = _OF["tasks"]
    labels = dict(zip(("setup", "phantom_session"), period, strict=True))
    found = achieved_width(**labels, **proving_inputs(Path(), tasks.study, **labels))
    write_record(Path(tasks.layout.achieved(*period)), found)


def measured(folder, *arguments, program=("-m", "snakemake")):
    """Wall and processor seconds, peak MB, and what a run of the workflow said."""
    fast = ["--cores", "2", "--scheduler", "greedy", "--scheduler-subsample", "50"]
    where = ["--snakefile", str(PROGRAM / "Snakefile"), "--directory", str(folder)]
    return called(*program, *where, *fast, *arguments)


def started(folder):
    """The same of a run as users call it."""
    return called(str(PROGRAM / "scripts" / "start.py"), "run", str(folder), "--cores", "2")


def called(*arguments):
    """The same of a call of Python."""
    with tempfile.TemporaryFile("w+") as text:
        begin = time.perf_counter()
        command = [sys.executable, *arguments]
        process = subprocess.Popen(command, stdout=text, stderr=subprocess.STDOUT)
        _, status, usage = os.wait4(process.pid, 0)
        wall = time.perf_counter() - begin
        text.seek(0)
        said = text.read()
    if status:
        raise SystemExit(said[-3000:])
    return (wall, usage.ru_utime + usage.ru_stime), usage.ru_maxrss / 1024, said


def seconds_a_job(folder, few, many):
    """The workflow's own seconds a job: of two runs that differ in their number of scans, without the smoothing.

    In place of Python a shell script stands that puts back the files that the scan had.
    """
    tasks = Tasks(load_study(folder), Ledger(folder, look=False), folder, PROGRAM)
    rows = tasks.accepted(f"{folder}/{tasks.layout.plan}")
    with tempfile.TemporaryDirectory() as temporary:
        stub = Path(temporary) / "stub"
        stub.write_text(STUB.format(kept=temporary))
        stub.chmod(0o755)
        program = ("-c", f"import sys; sys.executable = {str(stub)!r}\nfrom snakemake.cli import main; main()")
        spent = {}
        for jobs in (few, many):
            chosen = rows[:: len(rows) // jobs][:jobs]
            for row in chosen:
                for name in (tasks.layout.harmonised_image(row), tasks.layout.scan_record(row)):
                    shutil.copy2(folder / name, temporary)
            targets = [tasks.layout.harmonised_image(row) for row in chosen]
            spent[jobs], _, said = measured(folder, "--force", *targets, program=program)
            if f"{jobs} of {jobs} steps (100%) done" not in said:
                raise SystemExit(said[-3000:])
    return [(last - first) / (many - few) for first, last in zip(spent[few], spent[many], strict=True)]


def line(scans, what, seconds, memory=None):
    """Print a row."""
    wall, processor = seconds
    peak = "" if memory is None else f"{memory:6.0f} MB"
    print(f"{scans:6} scans  {what:4} {wall:8.3f} s wall {processor:8.3f} s processor {peak}", flush=True)


def check(said, words):
    """End unless a run said these words."""
    if words not in said:
        raise SystemExit(f"expected: {words}\n{said[-3000:]}")


def measure(folder, scans, jobs):
    """Print the rows of a finished study; the processor's seconds of `look` and of `idle`."""
    spent = {}
    spent["look"], memory, said = measured(folder)
    check(said, "Nothing to be done")
    line(scans, "look", spent["look"], memory)
    check(started(folder)[2], "Nothing to do")
    spent["idle"], memory, said = started(folder)
    check(said, "Nothing to do")
    line(scans, "idle", spent["idle"], memory)
    line(scans, "job", seconds_a_job(folder, *jobs))
    first = folder / "images/0/s000000.nii.gz"
    save_scan(first, scans + int(time.time()) % 900_000)
    first.touch()
    seconds, memory, said = started(folder)
    check(said, "Scans: ")
    line(scans, "one", seconds, memory)
    return {what: seconds[1] for what, seconds in spent.items()}


def main():
    """Print the table."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--scans", type=int, nargs="+", default=[1000, 5000, 20000])
    parser.add_argument("--keep", type=Path, help="folder for the studies; those that are there are used again")
    parser.add_argument("--jobs", type=int, nargs=2, default=[50, 450], help="jobs of the two forced runs")
    options = parser.parse_args()
    with tempfile.TemporaryDirectory() as temporary:
        base = options.keep or Path(temporary)
        spent = {}
        for scans in options.scans:
            folder = base.resolve() / f"{scans}"
            if not (folder / "finished").exists():
                make_study(folder, scans)
                line(scans, "dry", *measured(folder, "--dry-run", "--quiet", "all")[:2])
                begin = time.perf_counter()
                finish(folder)
                (folder / "finished").touch()
                print(f"{scans:6} scans  made {time.perf_counter() - begin:7.1f} s", flush=True)
            spent[scans] = measure(folder, scans, options.jobs)
        first, last = min(spent), max(spent)
        if first < last:
            for what in ("look", "idle"):
                growth = math.log(spent[last][what] / spent[first][what]) / math.log(last / first)
                print(f"{what} grows with the power {growth:.2f}")


if __name__ == "__main__":
    main()
