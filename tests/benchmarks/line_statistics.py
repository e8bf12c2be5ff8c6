"""Bias, scatter and honesty of the widths of line sources over many noisy images: what the tests see a few of.

The truth is a closed form sampled at voxel centres. The noise is white noise filtered with a Gaussian of 5 mm.
`coverage` is the share of images whose 95 % interval holds the truth; `rms_se/scatter` should be near 1. The times are
processor seconds a run.

Run from the repository: PYTHONPATH=scripts:tests python tests/benchmarks/line_statistics.py --case one_line
"""

import argparse

import line_simulation
from benchmarks.width_statistics import Case, run
from evenblur.phantoms import line_source

VOXEL = (2.0, 2.0, 3.0)


def one_line_case() -> Case:
    """One line, nearly straight, that leaves the field at both ends: 40 slices of 3 mm, 5 mm in-plane, 6 mm axial."""
    return _case([line_simulation.Capillary((51.3, 48.1), 60.0, line_simulation.slope_of(0.7))], 5.0, 6.0, slices=40)


def tilted_case() -> Case:
    """One line tilted by 10 degrees, 5 mm in-plane, 7 mm axial: the axial width must be told apart."""
    return _case([line_simulation.Capillary((51.3, 48.1), 60.0, line_simulation.slope_of(10.0))], 5.0, 7.0, slices=40)


def three_lines_case() -> Case:
    """Three lines at different radii, with ends inside the field, tilted by 1 to 4 degrees."""
    lines = [
        line_simulation.Capillary((40.3, 50.1), 75.0, line_simulation.slope_of(1.0), ends_mm=(20.0, 130.0)),
        line_simulation.Capillary((80.9, 41.2), 75.0, line_simulation.slope_of(2.5, 160.0), ends_mm=(20.0, 130.0)),
        line_simulation.Capillary((65.4, 90.3), 75.0, line_simulation.slope_of(4.0, 250.0), ends_mm=(20.0, 130.0)),
    ]
    return _case(lines, 6.0, 5.0, slices=50)


def short_line_case() -> Case:
    """One line through 16 slices only: its error comes from the empty background."""
    return _case([line_simulation.Capillary((51.3, 48.1), 24.0)], 5.0, 6.0, slices=16)


def _case(capillaries: list[line_simulation.Capillary], in_plane_mm: float, axial_mm: float, *, slices: int) -> Case:
    volume = line_simulation.lines(
        (64, 64, slices), voxel_mm=VOXEL, capillaries=capillaries, in_plane_mm=in_plane_mm, axial_mm=axial_mm
    )
    return Case(volume, VOXEL, {"in_plane": in_plane_mm}, lambda v: line_source.measure(v, voxel_mm=VOXEL, details={}))


CASES = {
    "one_line": one_line_case,
    "tilted": tilted_case,
    "three_lines": three_lines_case,
    "short_line": short_line_case,
}


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--case", choices=sorted(CASES), nargs="+", default=sorted(CASES))
    parser.add_argument("--runs", type=int, default=200)
    parser.add_argument("--noise", type=float, nargs="+", default=[0.01], help="share of the peak")
    arguments = parser.parse_args()
    print("case         noise  runs  bias_mm  scatter_mm  rms_se/scatter  coverage  cpu_seconds_a_run")
    for name in arguments.case:
        for noise in arguments.noise:
            for row in run(CASES[name](), noise=noise, runs=arguments.runs):
                print(
                    f"{name:<12} {noise:5.3f} {row.runs:5d} {row.bias:8.4f} {row.scatter:11.4f} {row.ratio:15.3f}"
                    f" {row.coverage:9.3f} {row.seconds:18.2f}",
                    flush=True,
                )


if __name__ == "__main__":
    main()
