"""How far hot-sphere widths scatter, and whether their stated errors tell the truth, over many invented phantoms.

Not a test: run by hand, `python tests/benchmarks/sphere_statistics.py --runs 50`. Each run has its own noise, ring
angle and sub-voxel place. Printed a line for each case: noise (share of the hot level), bias, scatter, rms se over
scatter, coverage of the 95 % interval, seconds of processor time.
"""

import argparse
import os
import sys
import time
from collections import Counter
from pathlib import Path

for name in ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS"):
    os.environ[name] = "1"
ROOT = Path(__file__).resolve().parents[2]
sys.path[:0] = [str(ROOT / "scripts"), str(ROOT / "tests")]

import numpy as np  # noqa: E402

from evenblur.phantoms.hot_spheres import measure  # noqa: E402
from evenblur.statistics import t_interval  # noqa: E402
from simulation import add_noise  # noqa: E402
from sphere_simulation import STANDARD_DIAMETERS_MM, ring_centres, sphere_phantom  # noqa: E402

CASES = {
    # name: (in-plane, axial FWHM mm), hot, background, body, voxel mm
    "4:1 4/5 mm": ((4.0, 5.0), 4.0, 1.0, True, (2.0, 2.0, 2.0)),
    "4:1 6/5 mm": ((6.0, 5.0), 4.0, 1.0, True, (2.5, 2.5, 3.0)),
    "8:1 6/7 mm": ((6.0, 7.0), 8.0, 1.0, True, (3.0, 3.0, 3.0)),
    "cold 5/6 mm": ((5.0, 6.0), 4.0, 0.0, False, (2.5, 2.5, 2.5)),
    "8:1 10/9 mm": ((10.0, 9.0), 8.0, 1.0, True, (4.0, 4.0, 4.0)),
    "4:1 12/14 mm": ((12.0, 14.0), 4.0, 1.0, True, (4.0, 4.0, 4.0)),
}


def one_run(case: str, noise: float, seed: int) -> tuple[list[tuple[float, float, float]], float, list[str]]:
    """Widths with their errors and degrees of freedom, seconds, and flags of one phantom."""
    fwhm, hot, background, body, voxel = CASES[case]
    rng = np.random.default_rng(seed)
    shape = tuple(int(np.ceil(size / step)) for size, step in zip((320.0, 260.0, 140.0), voxel, strict=True))
    middle = tuple(
        (count - 1) * step / 2.0 + rng.uniform(-0.5, 0.5) * step for count, step in zip(shape, voxel, strict=True)
    )
    volume = sphere_phantom(
        shape,
        voxel_mm=voxel,
        centres_mm=ring_centres(middle, turn_deg=float(rng.uniform(0.0, 60.0))),
        fwhm_mm=fwhm,
        hot=hot,
        background=background,
        body_radii_mm=(150.0, 115.0) if body else None,
        lung_radius_mm=25.0 if body else 0.0,
    )
    volume = add_noise(volume, level=noise * hot, fwhm_mm=5.0, voxel_mm=voxel, rng=rng)
    start = time.process_time()
    found = measure(volume, voxel_mm=voxel, details={"diameters_mm": list(STANDARD_DIAMETERS_MM), "wall_mm": 1.0})
    seconds = time.process_time() - start
    widths = [
        (w.fwhm_mm, np.nan if w.se_mm is None else w.se_mm, np.nan if w.df is None else w.df)
        for w in (found.in_plane, found.axial)
        if w is not None
    ]
    return widths, seconds, [flag.code for flag in found.flags]


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--runs", type=int, default=20)
    parser.add_argument("--noise", type=float, default=0.05)
    parser.add_argument("--cases", nargs="*", default=list(CASES), choices=list(CASES))
    arguments = parser.parse_args()
    print("case           direction  noise   bias mm  scatter mm  rms se/scatter  coverage  seconds  runs")
    for case in arguments.cases:
        runs, refused, codes = [], 0, Counter()
        seconds = []
        for seed in range(arguments.runs):
            try:
                widths, took, flags = one_run(case, arguments.noise, seed)
            except ValueError as error:
                refused += 1
                print(f"  run {seed}: {error}")
                continue
            runs.append(widths)
            seconds.append(took)
            codes.update(flags)
        table = np.array(runs)
        for k, direction in enumerate(("in-plane", "axial")):
            truth = CASES[case][0][k]
            values, errors, _ = table[:, k].T
            scatter = values.std(ddof=1)
            known = np.isfinite(errors)
            intervals = [t_interval(*row) for row in table[known, k]]
            covered = np.mean([low <= truth <= high for low, high in intervals]) if intervals else np.nan
            ratio = np.sqrt(np.mean(errors[known] ** 2)) / scatter
            print(
                f"{case:14s} {direction:9s} {arguments.noise:6.3f} {values.mean() - truth:+9.4f} {scatter:11.4f} "
                f"{ratio:15.3f} {covered:9.3f} {np.mean(seconds):8.2f} {len(runs):5d}"
            )
        print(f"  refused: {refused}; flags: {dict(codes)}", flush=True)


if __name__ == "__main__":
    main()
