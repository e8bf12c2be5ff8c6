"""Memory and run time of each step by image size, beside what the workflow's rules ask for.

python tests/benchmarks/step_costs.py [--scales 1 1.6 2.5] [--steps take_in_image measure_resolution ...]

A base image of each kind is enlarged to more and smaller voxels (linear interpolation: the object stays as large).
Each step command runs once a size, as in the workflow, in a process of its own. Printed: megavoxels a frame (of image
and reference together), frames, peak resident MB, what the rule declares, seconds. The formulas in
scripts/evenblur/study/resources.py rest on this table.
"""

import argparse
import json
import subprocess
import sys
import tempfile
from pathlib import Path

import nibabel as nib
import numpy as np
from scipy import ndimage

PROGRAM = Path(__file__).resolve().parents[2]
sys.path[:0] = [str(PROGRAM / "scripts"), str(PROGRAM / "tests")]

import simulation  # noqa: E402
from evenblur.study.resources import declared  # noqa: E402
from reference_simulation import Truth, invented_head, measured_image  # noqa: E402
from sphere_simulation import ring_centres, sphere_phantom  # noqa: E402

# A launcher of few megabytes: the peak of a child counts what its parent held when it split off.
LAUNCH = """
import os, subprocess, sys, time
begin = time.perf_counter()
process = subprocess.Popen(sys.argv[1:], stdout=subprocess.DEVNULL)
_, status, usage = os.wait4(process.pid, 0)
print(usage.ru_maxrss / 1024, time.perf_counter() - begin, status)
"""
NOISE = 0.02


def cylinder():
    """A straight cylinder with both ends in the field."""
    shape, voxel = (96, 96, 56), (2.9, 2.9, 3.0)
    middle = (140.0, 140.0)
    volume = simulation.straight_cylinder(
        shape,
        voxel_mm=voxel,
        centre_mm=middle,
        radius_mm=98.0,
        ends_mm=(30.0, 140.0),
        in_plane_mm=6.0,
        axial_mm=6.0,
    )
    return volume, voxel, {"radius_mm": 98.0, "length_mm": 110.0}


def points():
    """Six sources well apart."""
    shape, voxel = (96, 96, 56), (2.5, 2.5, 3.0)
    places = [(60, 60, 40), (180, 62, 42), (61, 180, 120), (181, 182, 121), (120, 121, 43), (119, 120, 122)]
    volume = simulation.point_sources(shape, voxel_mm=voxel, positions_mm=places, in_plane_mm=6.0, axial_mm=7.0)
    return volume, voxel, {"source_diameter_mm": 0.0}


def lines():
    """Three long sources along the bed."""
    shape, voxel = (96, 96, 56), (2.5, 2.5, 3.0)
    x, y = (np.arange(count) * step for count, step in zip(shape[:2], voxel[:2], strict=True))
    volume = np.zeros(shape)
    for px, py in ((60, 60), (180, 100), (110, 180)):
        flat = np.exp(-((x[:, None] - px) ** 2 + (y[None, :] - py) ** 2) / (2 * (6.0 / 2.3548) ** 2))
        volume += flat[:, :, None]
    return volume, voxel, {"source_diameter_mm": 0.0}


def spheres():
    """Six spheres in a warm body."""
    shape, voxel = (128, 104, 47), (2.5, 2.5, 3.0)
    middle = tuple((count - 1) * step / 2 for count, step in zip(shape, voxel, strict=True))
    volume = sphere_phantom(
        shape, voxel_mm=voxel, centres_mm=ring_centres(middle, turn_deg=20.0), fwhm_mm=(6.0, 5.0), hot=4.0
    )
    return volume, voxel, {"diameters_mm": [10.0, 13.0, 17.0, 22.0, 28.0, 37.0], "wall_mm": 1.0}


def head():
    """A head with its digital reference, which is enlarged as well."""
    voxel = (2.5, 2.5, 2.5)
    truth = Truth(in_plane_mm=6.0, axial_mm=7.0)
    reference = invented_head()
    volume = measured_image(reference, (2.0,) * 3, shape=(64, 72, 52), voxel_mm=voxel, truth=truth)
    return volume, voxel, {"reference": reference}


KINDS = {
    "uniform_cylinder": cylinder,
    "point_source": points,
    "line_source": lines,
    "hot_spheres": spheres,
    "reference_image": head,
}


def save(path, volume, voxel_mm, *, dtype=np.float32, frames=1):
    """Write an image (compressed where the name says so); several frames are copies."""
    values = np.asarray(volume, dtype=dtype)
    if frames > 1:
        values = np.repeat(values[..., None], frames, axis=3)
    image = nib.Nifti1Image(values, np.diag([*voxel_mm, 1.0]))
    image.header.set_xyzt_units("mm", "sec")
    nib.save(image, path)


def enlarged(volume, voxel_mm, scale):
    """The volume on a finer grid, with noise, and its voxel size."""
    fine = ndimage.zoom(volume, scale, order=1)
    size = tuple(step * old / new for step, old, new in zip(voxel_mm, volume.shape, fine.shape, strict=True))
    return 1000 * (fine + NOISE * np.random.default_rng(0).standard_normal(fine.shape)), size


def cost(step, *arguments, cwd=None):
    """Peak MB and seconds of one step command."""
    command = [sys.executable, str(PROGRAM / "scripts" / f"{step}.py"), *map(str, arguments)]
    launcher = [sys.executable, "-S", "-c", LAUNCH, *command]
    done = subprocess.run(launcher, check=True, capture_output=True, text=True, cwd=cwd)
    memory, seconds, status = done.stdout.split()
    if status != "0":
        raise SystemExit(f"{step}: {done.stderr}")
    return float(memory), float(seconds)


def line(step, what, voxels, frames, memory, seconds):
    """Print a row."""
    asked = declared(step, voxels=voxels, frames=frames)
    short = "  SHORT" if memory > asked["mem_mb"] or seconds > 60 * asked["runtime"] else ""
    size = f"{voxels / 1e6:7.2f} Mvoxels x {frames:2}"
    print(
        f"{step:18} {what:22} {size} {memory:7.0f} of {asked['mem_mb']:6} MB"
        f" {seconds:7.1f} s of {asked['runtime']:4} min{short}",
        flush=True,
    )


def scans(folder, scales, steps):
    """Intake and smoothing of scans of several kinds of file."""
    volume, voxel, _ = cylinder()
    for scale in scales:
        fine, size = enlarged(volume, voxel, scale)
        cases = (("int16 .nii.gz", np.int16, 1), ("float32 .nii.gz", np.float32, 1), ("float32 .nii.gz", np.float32, 6))
        for what, dtype, frames in cases:
            path = folder / "scan.nii.gz"
            save(path, fine, size, dtype=dtype, frames=frames)
            if "take_in_image" in steps:
                found = cost("take_in_image", "--image", path, "--record", folder / "intake.json")
                line("take_in_image", what, fine.size, frames, *found)
            if "smooth_scan" in steps:
                widths = ("--in-plane-mm", 4.2, "--axial-mm", 3.9)
                out = ("--out", folder / "out.nii.gz", "--record", folder / "out.json")
                line("smooth_scan", what, fine.size, frames, *cost("smooth_scan", "--image", path, *widths, *out))


def study_of_one(folder, kind, details):
    """A study of one phantom and one scan with a fixed target, kernels matched."""
    (folder / "config").mkdir(exist_ok=True)
    approval = "approval: {by: benchmark, on: 2026-01-01, reason: benchmark}"
    target = f"target: {{choose: fixed, in_plane_mm: 9.0, axial_mm: 9.0, {approval}}}"
    (folder / "config/study.yaml").write_text(f"study: {{title: Invented}}\nkernel: matched\n{target}\n")
    setup = "a-1\tsite\t7\t7\tinvented"
    names = "setup\tsite\tdeclared_in_plane_mm\tdeclared_axial_mm\tdeclared_source"
    (folder / "config/setups.tsv").write_text(f"{names}\n{setup}\n")
    row = f"p\ta-1\ts1\t2026-01-01\t{kind}\tphantom.nii.gz\t{json.dumps(details)}"
    names = "phantom\tsetup\tphantom_session\tacquired\tkind\timage\tdetails"
    (folder / "config/phantoms.tsv").write_text(f"{names}\n{row}\n")
    (folder / "config/scans.tsv").write_text(
        "subject\tsession\tsetup\tacquired\timage\ns1\tbase\ta-1\t2026-01-02\tscan.nii.gz\n"
    )
    save(folder / "scan.nii.gz", np.arange(40.0**3).reshape(40, 40, 40), (4.0, 4.0, 4.0))


def phantoms(folder, scales, steps, kinds):
    """Measuring, measuring again and matching of every kind."""
    for kind in kinds:
        volume, voxel, details = KINDS[kind]()
        for scale in scales:
            fine, size = enlarged(volume, voxel, scale)
            given, held = dict(details), fine.size
            if "reference" in details:
                reference = ndimage.zoom(details["reference"], scale, order=1)
                save(folder / "reference.nii.gz", reference, (2.0 / scale,) * 3)
                held += reference.size
                given["reference"] = "reference.nii.gz"
            save(folder / "phantom.nii.gz", fine, size)
            for sub in ("intake/phantoms", "intake/scans", "resolution"):
                (folder / "results" / sub).mkdir(parents=True, exist_ok=True)
            record = folder / "results/resolution/p.json"
            seen = ("--phantom", "p", "--setup", "a-1", "--phantom-session", "s1", "--details-text", json.dumps(given))
            image = ("--kind", kind, "--image", "phantom.nii.gz")
            found = cost("measure_resolution", *image, *seen, "--out", record, cwd=folder)
            line("measure_resolution", kind, held, 1, *found)
            if not {"measure_achieved", "match_kernel"} & set(steps):
                continue
            study_of_one(folder, kind, given)
            for group, key, image in (("scan", "sub-s1_ses-base", "scan"), ("phantom", "p", "phantom")):
                out = folder / f"results/intake/{group}s/{key}.json"
                command = [sys.executable, PROGRAM / "scripts/take_in_image.py", "--image", f"{image}.nii.gz"]
                command += ["--item", group, "--key", key, "--record", out]
                subprocess.run(command, check=True, cwd=folder)
            cost("make_plan", "--study-dir", folder, "--draft")
            period = ("--study-dir", folder, "--setup", "a-1", "--phantom-session", "s1")
            line("match_kernel", kind, held, 1, *cost("match_kernel", *period))
            cost("make_plan", "--study-dir", folder)
            line("measure_achieved", kind, held, 1, *cost("measure_achieved", *period))


def main():
    """Print the table."""
    every = ["take_in_image", "smooth_scan", "measure_resolution", "match_kernel", "measure_achieved"]
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--scales", type=float, nargs="+", default=[1.0, 1.6, 2.5])
    parser.add_argument("--steps", nargs="+", choices=every, default=every)
    parser.add_argument("--kinds", nargs="+", choices=sorted(KINDS), default=sorted(KINDS))
    options = parser.parse_args()
    with tempfile.TemporaryDirectory() as temporary:
        folder = Path(temporary)
        if {"take_in_image", "smooth_scan"} & set(options.steps):
            scans(folder, options.scales, options.steps)
        if {"measure_resolution", "match_kernel", "measure_achieved"} & set(options.steps):
            phantoms(folder, options.scales, options.steps, options.kinds)


if __name__ == "__main__":
    main()
