"""A small study of point sources, quick enough to run whole many times, and what a run of it did."""

import gzip
import os
import re
import shutil
import subprocess
import sys
from dataclasses import dataclass
from pathlib import Path

import nibabel as nib
import numpy as np

PROGRAM = Path(__file__).resolve().parents[2]

SETTINGS = """\
study: {title: Small invented study}
target:
  choose: fixed
  in_plane_mm: 8.0
  axial_mm: 8.0
  approval: {by: invented board, on: 2026-01-02, reason: agreed}
"""
COARSEST = "study: {title: Small invented study}\n"
PHANTOM_COLUMNS = "phantom setup phantom_session acquired kind image details"
SCAN_COLUMNS = "subject session setup acquired image"
# True widths in-plane and axial, mm, of each setup.
WIDTHS = {"quay-1": (5.0, 6.0), "mill-1": (6.5, 5.5), "moor-1": (7.0, 7.5)}
SUBJECTS = {"q01": "quay-1", "q02": "quay-1", "m01": "mill-1", "m02": "mill-1", "o01": "moor-1"}

# The day that lines of the history get, so that two runs about midnight agree.
DAY, EPOCH = "2026-03-31", "1774915200"


def environment():
    """The environment as it is now, with that day."""
    return {**os.environ, "SOURCE_DATE_EPOCH": EPOCH}


SHAPE, VOXEL = (56, 56, 40), (2.0, 2.0, 2.5)

# Messages of the jobs that are no one image's and no one period's.
PLAN = "Make the plan: target, kernels, accepted and held scans"
PRICES = "Price the targets"
EFFECT = "Compare the sites before and after"
HISTORY = "Record what changed"
TABLES = "Write the audit tables"
PICTURES = "Draw a few scans of each site before and after smoothing"
REPORT = "Write the report"
PACK = "Pack the bag for the auditor"
# What every new plan redoes. The sites are compared anew only where a phantom, a kernel or a regional mean changed.
AUDIT = frozenset({PRICES, HISTORY, TABLES, PICTURES, REPORT, PACK})


def named(jobs, *beginnings):
    """Jobs whose message begins so."""
    return {job for job in jobs if job.startswith(beginnings)}


def smoothed(jobs):
    """Subjects whose scans were smoothed."""
    return {job.split("sub-")[1].split("_")[0] for job in named(jobs, "Smooth sub-")}


def proved(jobs):
    """Periods whose achieved widths were measured."""
    return {job.removeprefix("Smooth and measure again the phantoms of ") for job in named(jobs, "Smooth and measure")}


def gaussians(in_plane_mm, axial_mm, centres, *, seed, noise=0.01):
    """Point sources in closed form, sampled at voxel centres, with a little white noise."""
    sigma = np.array([in_plane_mm, in_plane_mm, axial_mm]) / 2.354820045
    places = [np.arange(n) * size for n, size in zip(SHAPE, VOXEL, strict=True)]
    volume = np.zeros(SHAPE)
    for centre in centres:
        parts = [np.exp(-((x - c) ** 2) / (2 * s**2)) for x, c, s in zip(places, centre, sigma, strict=True)]
        volume += parts[0][:, None, None] * parts[1][None, :, None] * parts[2][None, None, :]
    rng = np.random.default_rng(seed)
    return (1000 * (volume + noise * rng.standard_normal(SHAPE))).astype(np.float32)


def save(path, volume, *, date_s=1_700_000_000):
    """Write a NIfTI file, the same bytes for the same volume, dated long ago so that the ledger trusts its date."""
    path.parent.mkdir(parents=True, exist_ok=True)
    image = nib.Nifti1Image(volume, np.diag([*VOXEL, 1.0]))
    image.header.set_xyzt_units("mm", "sec")
    path.write_bytes(gzip.compress(image.to_bytes(), mtime=0))
    os.utime(path, (date_s, date_s))


def phantom_volume(setup, *, seed=1, widen=0.0):
    """The phantom image of a setup: six sources well apart."""
    in_plane, axial = WIDTHS[setup]
    centres = [(30, 30, 28), (82, 31, 29), (31, 81, 71), (80, 82, 70), (56, 55, 29), (54, 56, 72)]
    return gaussians(in_plane + widen, axial, centres, seed=seed)


def scan_volume(subject):
    """A scan: a few blurred spots, others for each subject."""
    seed = sum(map(ord, subject))
    rng = np.random.default_rng(seed)
    centres = rng.uniform(30, 70, (12, 3))
    return gaussians(*WIDTHS[SUBJECTS.get(subject, "quay-1")], centres, seed=seed)


def write_table(path, columns, rows):
    path.write_text("\n".join("\t".join(row) for row in [columns.split(), *rows]) + "\n")


def phantom_rows():
    details = "{source_diameter_mm: 0}"
    return [[f"{s}-points", s, "p1", "2026-01-10", "point_source", f"images/{s}.nii.gz", details] for s in WIDTHS]


def scan_rows():
    return [[s, "base", setup, "2026-02-01", f"images/{s}.nii.gz"] for s, setup in SUBJECTS.items()]


def make_study(study_dir):
    """Write the study's tables and images."""
    config = study_dir / "config"
    config.mkdir(parents=True)
    (config / "study.yaml").write_text(SETTINGS)
    write_table(config / "setups.tsv", "setup site", [[setup, setup.split("-")[0]] for setup in WIDTHS])
    write_table(config / "phantoms.tsv", PHANTOM_COLUMNS, phantom_rows())
    write_table(config / "scans.tsv", SCAN_COLUMNS, scan_rows())
    for setup in WIDTHS:
        save(study_dir / "images" / f"{setup}.nii.gz", phantom_volume(setup))
    for subject in SUBJECTS:
        save(study_dir / "images" / f"{subject}.nii.gz", scan_volume(subject))
    return study_dir


@dataclass(frozen=True)
class Run:
    """What a run said and did: the messages of its jobs, its exit code, its text."""

    jobs: frozenset[str]
    code: int
    text: str

    @property
    def idle(self):
        return "Nothing to be done" in self.text and not self.jobs


def command(study_dir, *arguments, program=PROGRAM):
    plain = ["--scheduler", "greedy", "--cores", "2", "--directory", str(study_dir)]
    return [sys.executable, "-m", "snakemake", "--snakefile", str(program / "Snakefile"), *plain, *arguments]


def snakemake(study_dir, *arguments, program=PROGRAM):
    """Run the workflow on a study; the jobs are told apart by their messages."""
    done = subprocess.run(
        command(study_dir, *arguments, program=program),
        capture_output=True,
        text=True,
        timeout=600,
        check=False,
        env=environment(),
    )
    text = done.stdout + done.stderr
    # A dry run shows the jobs of a group indented.
    jobs = re.findall(r"^ *Job \d+: (.*)$", text, flags=re.MULTILINE)
    return Run(frozenset(job.strip() for job in jobs), done.returncode, text)


def dry_and_real(study_dir, *, program=PROGRAM):
    """The jobs that a dry run foretells and those that a real run does, after which nothing is left to do."""
    dry = snakemake(study_dir, "--dry-run", program=program)
    real = snakemake(study_dir, program=program)
    assert dry.code == real.code == 0, real.text
    rest = snakemake(study_dir, "--dry-run", program=program)
    assert rest.idle, rest.text
    return dry.jobs, real.jobs


def result_bytes(study_dir):
    """Every result file with its bytes."""
    results = study_dir / "results"
    return {str(p.relative_to(results)): p.read_bytes() for p in sorted(results.rglob("*")) if p.is_file()}


def copy_program(target):
    """A copy of the program as a fresh clone has it: new dates, no caches."""
    hidden = shutil.ignore_patterns(".git", ".venv", "__pycache__", ".*_cache", ".snakemake", "results", ".evenblur")
    shutil.copytree(PROGRAM, target, ignore=hidden, copy_function=shutil.copy)
    return target
