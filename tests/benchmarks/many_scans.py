"""Where the wall time of many scans goes: smoothing with reading and writing, or everything around it.

python tests/benchmarks/many_scans.py [--scans 200] [--shape 128 128 90] [--cores 2]

Makes a study of scans with declared widths, takes it in and plans it, then times what is left: the smoothing of all
scans through the workflow, and the audit. Named parts, in core-seconds: `work` is the same smoothing of the same scans
in one process, its imports paid once (what several scans a process could reach at most); `start` is the start and the
imports of each job's Python; the rest is the workflow engine, the audit and idle cores.
"""

import argparse
import statistics
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import nibabel as nib
import numpy as np
from isal import igzip

PROGRAM = Path(__file__).resolve().parents[2]
SETTINGS = """\
study: {title: Many invented scans}
target:
  choose: fixed
  in_plane_mm: 8.0
  axial_mm: 8.0
  approval: {by: benchmark, on: 2026-01-01, reason: benchmark}
"""
IN_ONE_PROCESS = """
import sys
from pathlib import Path
from evenblur import command
import time
begin = time.perf_counter()
from evenblur.images.harmonise import harmonise_scan
for name in sys.argv[2:]:
    out = Path(sys.argv[1]) / Path(name).name
    harmonise_scan(Path(name), in_plane_mm=6.2, axial_mm=5.2, out=out, record=out.with_suffix(".json"))
print(time.perf_counter() - begin)
"""


def make_study(folder, scans, shape):
    """Write a study of distinct scans with declared widths."""
    (folder / "config").mkdir(parents=True)
    (folder / "images").mkdir()
    (folder / "config/study.yaml").write_text(SETTINGS)
    (folder / "config/phantoms.tsv").write_text("phantom\tsetup\tphantom_session\tacquired\tkind\timage\n")
    (folder / "config/setups.tsv").write_text(
        "setup\tsite\tdeclared_in_plane_mm\tdeclared_axial_mm\tdeclared_source\nquay-1\tquay\t5\t6\tbenchmark\n"
    )
    rng = np.random.default_rng(0)
    values = rng.poisson(200, shape).astype(np.int16)
    header = nib.Nifti1Image(values, np.diag([2.0, 2.0, 2.0, 1.0])).header
    header["vox_offset"] = 352
    rows = ["subject\tsession\tsetup\tacquired\timage"]
    for number in range(scans):
        values[0, 0, 0] = number
        name = f"images/s{number:04d}.nii.gz"
        with igzip.open(folder / name, "wb", 1) as stream:
            stream.write(header.binaryblock + bytes(4) + values.tobytes(order="F"))
        rows.append(f"s{number:04d}\tbase\tquay-1\t2026-01-01\t{name}")
    (folder / "config/scans.tsv").write_text("\n".join(rows) + "\n")


def workflow(folder, cores, *targets):
    """Wall seconds of a run of the workflow."""
    fast = ["--quiet", "all", "--scheduler", "greedy", "--scheduler-subsample", "50"]
    begin = time.perf_counter()
    where = ["--snakefile", PROGRAM / "Snakefile", "--directory", folder, "--cores", str(cores)]
    subprocess.run([sys.executable, "-m", "snakemake", *where, *fast, *targets], check=True, capture_output=True)
    return time.perf_counter() - begin


def main():
    """Print the table."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--scans", type=int, default=200)
    parser.add_argument("--shape", type=int, nargs=3, default=(128, 128, 90))
    parser.add_argument("--cores", type=int, default=2)
    options = parser.parse_args()
    with tempfile.TemporaryDirectory() as temporary:
        folder = Path(temporary) / "study"
        make_study(folder, options.scans, options.shape)
        intake = workflow(folder, options.cores, "plan")
        idle = workflow(folder, options.cores, "plan")
        wall = workflow(folder, options.cores)
        images = sorted(str(path) for path in (folder / "images").iterdir())
        command = [sys.executable, "-c", IN_ONE_PROCESS, temporary, *images]
        work = float(
            subprocess.run(command, check=True, capture_output=True, text=True, cwd=PROGRAM / "scripts").stdout
        )
        starts = []
        for _ in range(5):
            begin = time.perf_counter()
            subprocess.run(
                [sys.executable, PROGRAM / "scripts/smooth_scan.py", "--help"], check=True, capture_output=True
            )
            starts.append(time.perf_counter() - begin)
    start = statistics.median(starts) * options.scans
    paid = wall * options.cores
    print(f"{options.scans} scans of {'x'.join(map(str, options.shape))} on {options.cores} cores")
    print(f"intake and plan {intake:8.1f} s; with nothing to do {idle:.1f} s")
    print(f"the rest        {wall:8.1f} s wall, {wall / options.scans:.3f} s a scan")
    for name, part in (("work", work), ("start", start), ("rest", paid - work - start)):
        print(f"  {name:13} {part:8.1f} core-s {100 * part / paid:5.1f} %")
    print(f"not smoothing, reading or writing: {100 * (1 - work / paid):.1f} % of the wall time")


if __name__ == "__main__":
    main()
