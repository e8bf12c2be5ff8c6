"""How well widths and their standard errors hold in repeated noise: bias, scatter, coverage, seconds a run.

Run from the repository: PYTHONPATH=scripts:tests python tests/benchmarks/width_statistics.py --kind uniform_cylinder
"""

import argparse
import time
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

import simulation
from evenblur.phantoms import point_source, uniform_cylinder
from evenblur.phantoms.base import Measurement
from evenblur.statistics import t_interval

CORRELATION_MM = 5.0


@dataclass(frozen=True)
class Case:
    """A noise-free image whose activity (or peak) is 1, its truth, and the function that measures it."""

    volume: np.ndarray
    voxel_mm: tuple[float, float, float]
    truth_mm: dict[str, float]
    measure: Callable[[np.ndarray], Measurement]


@dataclass(frozen=True)
class Row:
    """Figures of one direction at one noise level (mm, but coverage and ratio are numbers)."""

    direction: str
    runs: int
    bias: float
    scatter: float
    ratio: float
    coverage: float
    seconds: float


def uniform_cylinder_case() -> Case:
    """Cylinder of radius 100 mm that leaves the field at both ends: 30 slices of 3 mm, pixels of 2 mm, 6 mm wide."""
    voxel = (2.0, 2.0, 3.0)
    volume = simulation.straight_cylinder(
        (112, 112, 30), voxel_mm=voxel, centre_mm=(110.3, 111.2), radius_mm=100.0,
        ends_mm=(-1e6, 1e6), in_plane_mm=6.0, axial_mm=5.0,
    )  # fmt: skip
    return Case(
        volume,
        voxel,
        {"in_plane": 6.0},
        lambda v: uniform_cylinder.measure(v, voxel_mm=voxel, details={"radius_mm": 100.0}),
    )


def cylinder_ends_case() -> Case:
    """Tilted cylinder of radius 60 mm with both ends in the field, 6 mm in-plane and 8 mm axial."""
    voxel = (2.0, 2.0, 3.0)
    volume = simulation.tilted_cylinder(
        (80, 76, 60), voxel_mm=voxel, centre_mm=(79.0, 75.5, 89.0), radius_mm=55.0, length_mm=110.0,
        in_plane_mm=6.0, axial_mm=8.0, slope=(0.06, -0.04),
    )  # fmt: skip
    return Case(
        volume,
        voxel,
        {"in_plane": 6.0, "axial": 8.0},
        lambda v: uniform_cylinder.measure(v, voxel_mm=voxel, details={}),
    )


def point_source_case() -> Case:
    """Three point sources, 5 mm in-plane and 6 mm axial, in voxels of 2 x 2 x 2 mm."""
    voxel = (2.0, 2.0, 2.0)
    volume = simulation.point_sources(
        (80, 60, 40), voxel_mm=voxel, positions_mm=[(60.3, 60.8, 40.1), (90.9, 61.2, 39.3), (131.4, 60.1, 40.7)],
        in_plane_mm=5.0, axial_mm=6.0,
    )  # fmt: skip
    return Case(
        volume, voxel, {"in_plane": 5.0, "axial": 6.0}, lambda v: point_source.measure(v, voxel_mm=voxel, details={})
    )


CASES = {
    "uniform_cylinder": uniform_cylinder_case,
    "cylinder_ends": cylinder_ends_case,
    "point_source": point_source_case,
}


def run(case: Case, *, noise: float, runs: int, seed: int = 20) -> list[Row]:
    """Measure the case in `runs` draws of noise; `noise` is the share of activity or peak in every voxel."""
    rng = np.random.default_rng(seed)
    found: dict[str, list[tuple[float, float, bool]]] = {name: [] for name in case.truth_mm}
    spent = 0.0
    for _ in range(runs):
        image = simulation.add_noise(case.volume, level=noise, fwhm_mm=CORRELATION_MM, voxel_mm=case.voxel_mm, rng=rng)
        began = time.process_time()
        result = case.measure(image)
        spent += time.process_time() - began
        for name, truth in case.truth_mm.items():
            width = getattr(result, name)
            if width is None or width.se_mm is None:
                found[name].append((np.nan if width is None else width.fwhm_mm, np.nan, False))
                continue
            low, high = t_interval(width.fwhm_mm, width.se_mm, width.df)
            found[name].append((width.fwhm_mm, width.se_mm, low <= truth <= high))
    rows = []
    for name, truth in case.truth_mm.items():
        values = np.array([f[0] for f in found[name]])
        errors = np.array([f[1] for f in found[name]])
        scatter = float(values.std(ddof=1))
        ratio = float(np.sqrt(np.mean(errors**2)) / scatter)
        coverage = float(np.mean([f[2] for f in found[name]]))
        rows.append(Row(name, runs, float(values.mean() - truth), scatter, ratio, coverage, spent / runs))
    return rows


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--kind", choices=sorted(CASES), default="uniform_cylinder")
    parser.add_argument("--runs", type=int, default=500)
    parser.add_argument("--noise", type=float, nargs="+", default=[0.05, 0.10], help="share of the activity or peak")
    arguments = parser.parse_args()
    case = CASES[arguments.kind]()
    print("kind              direction  noise  runs  bias_mm  scatter_mm  rms_se/scatter  coverage  cpu_seconds_a_run")
    for noise in arguments.noise:
        for row in run(case, noise=noise, runs=arguments.runs):
            print(
                f"{arguments.kind:<17} {row.direction:<9} {noise:6.3f} {row.runs:5d} {row.bias:8.4f}"
                f" {row.scatter:11.4f} {row.ratio:15.3f} {row.coverage:9.3f} {row.seconds:18.2f}",
                flush=True,
            )


if __name__ == "__main__":
    main()
