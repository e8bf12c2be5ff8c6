"""How the width depends on the object and the number of iterations under an iterative reconstruction.

A small simulated tomograph (tests/tomograph.py) sees a filled cylinder, a thin line in air, and the same line within
the warm cylinder. Each is brought back by filtered back-projection and by ordered-subsets expectation maximisation, and
measured as the program measures phantoms. Lengths in mm; no noise unless counts are given.

Run from the repository: PYTHONPATH=scripts:tests python tests/benchmarks/tomograph_iterations.py
"""

import argparse
from collections.abc import Callable

import numpy as np

import tomograph as tg
from evenblur.phantoms import line_source, uniform_cylinder
from evenblur.phantoms.base import MeasurementError

SLICE_MM, AXIAL_MM = 3.0, 5.0
RADIUS_MM = 50.0
SOURCE_MM = 3.0
PLACE_MM = (11.0, 7.0)
"""Where the line is: off the middle, between the pixels' centres."""
CONTRAST = 6.0
"""Activity of the source against the warm cylinder's; blurred, it stands out by about as much as the background."""
SLICES = 24
OBJECTS = ("cylinder", "source_in_air", "source_in_warm")


def drawn(tomograph: tg.Tomograph, name: str) -> np.ndarray:
    """The object on the tomograph's fine grid."""
    if name == "cylinder":
        return tg.disc(tomograph, radius_mm=RADIUS_MM)
    source = CONTRAST * tg.disc(tomograph, radius_mm=SOURCE_MM / 2, centre_mm=PLACE_MM)
    return source + tg.disc(tomograph, radius_mm=RADIUS_MM) if name == "source_in_warm" else source


def sinograms(tomograph: tg.Tomograph, name: str, *, counts: float, seed: int = 7) -> np.ndarray:
    """Projections of the object: one slice without noise (counts 0), else SLICES of them with Poisson counts."""
    clean = tomograph.project(drawn(tomograph, name))
    if counts == 0.0:
        return clean[None]
    return tg.noisy_slices(clean, slices=SLICES, counts=counts, rng=np.random.default_rng(seed))


def width_of(images: np.ndarray, name: str, *, tomograph: tg.Tomograph) -> float:
    """In-plane width (mm) of the stacked slices; the line in the warm cylinder is measured in a cut-out around it."""
    if images.shape[0] == 1:
        images = np.repeat(images, SLICES, axis=0)
    volume = tg.stacked(images, axial_mm=AXIAL_MM, slice_mm=SLICE_MM)
    voxel = (tomograph.pixel_mm, tomograph.pixel_mm, SLICE_MM)
    measure: Callable = uniform_cylinder.measure
    details: dict[str, float] = {}
    if name != "cylinder":
        measure, details = line_source.measure, {"source_diameter_mm": SOURCE_MM}
    if name == "source_in_warm":
        middle = [round(p / tomograph.pixel_mm + (tomograph.pixels - 1) / 2) for p in PLACE_MM]
        volume = volume[middle[0] - 12 : middle[0] + 13, middle[1] - 12 : middle[1] + 13]
    try:
        return measure(volume, voxel_mm=voxel, details=details).in_plane.fwhm_mm
    except MeasurementError:
        return float("nan")


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--iterations", type=int, nargs="+", default=[1, 2, 4, 8, 16, 32, 64, 128])
    parser.add_argument("--subsets", type=int, default=8)
    parser.add_argument("--counts", type=float, default=0.0, help="in each slice; 0 for none of the noise")
    arguments = parser.parse_args()
    tomograph = tg.Tomograph()
    print("reconstruction       cylinder_mm  source_in_air_mm  source_in_warm_mm")
    data = {name: sinograms(tomograph, name, counts=arguments.counts) for name in OBJECTS}
    widths = [width_of(tomograph.filtered_back_projection(data[name]), name, tomograph=tomograph) for name in OBJECTS]
    print(f"{'filtered':<20} {widths[0]:11.3f} {widths[1]:17.3f} {widths[2]:18.3f}", flush=True)
    images = {
        name: tomograph.expectation_maximisation(data[name], stops=arguments.iterations, subsets=arguments.subsets)
        for name in OBJECTS
    }
    for stop in arguments.iterations:
        widths = [width_of(images[name][stop], name, tomograph=tomograph) for name in OBJECTS]
        label = f"{stop} x {arguments.subsets} subsets"
        print(f"{label:<20} {widths[0]:11.3f} {widths[1]:17.3f} {widths[2]:18.3f}", flush=True)


if __name__ == "__main__":
    main()
