"""Bias, scatter and honesty of the errors of widths measured with a digital reference.

    python tests/benchmarks/reference_statistics.py --runs 40

One clean image a case, many draws of noise (correlated over 5 mm, sd in % of the usual level). Prints, per case and
direction: kind, noise, bias, scatter, root mean square se over scatter, coverage of the 95 % interval, seconds a run.
With nilearn installed, the grey and white matter of its MNI template (4:1, with an invented lesion) is a case too.
"""

import argparse
import importlib.util
import sys
import time
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

ROOT = Path(__file__).resolve().parents[2]
sys.path[:0] = [str(ROOT / "scripts"), str(ROOT / "tests")]

from evenblur.phantoms.reference_image import measure  # noqa: E402
from evenblur.statistics import t_interval  # noqa: E402
from reference_simulation import Truth, invented_head, measured_image  # noqa: E402
from simulation import add_noise  # noqa: E402


def template_head() -> NDArray[np.float64] | None:
    """Grey : white = 4 : 1 of the template that nilearn carries, 1 mm voxels, with a lesion on one side."""
    spec = importlib.util.find_spec("nilearn")
    if spec is None or not spec.submodule_search_locations:
        return None
    import nibabel

    folder = Path(spec.submodule_search_locations[0]) / "datasets" / "data"
    grey, white = (
        np.asarray(nibabel.load(folder / f"mni_icbm152_{name}_tal_nlin_sym_09a_converted.nii.gz").dataobj, dtype=float)
        for name in ("gm", "wm")
    )
    head = (4.0 * grey + white) / 255.0
    x, y, z = np.indices(head.shape)
    head[(x - 130) ** 2 + (y - 130) ** 2 + (z - 90) ** 2 < 10**2] = 6.0
    return head


def run_case(name: str, reference, voxel, shape, image_voxel, truth: Truth, *, noise: float, runs: int) -> None:
    """Measure one case many times and print its line for each direction."""
    clean = measured_image(reference, voxel, shape=shape, voxel_mm=image_voxel, truth=truth)
    rng = np.random.default_rng(2718)
    details = {"reference_volume": reference, "reference_voxel_mm": voxel}
    found: dict[str, list[tuple[float, float, bool]]] = {"in-plane": [], "axial": []}
    codes: dict[str, int] = {}
    started = time.perf_counter()
    for _ in range(runs if noise else 1):
        image = add_noise(clean, level=noise * truth.scale, voxel_mm=image_voxel, rng=rng)
        result = measure(image, voxel_mm=image_voxel, details=details)
        for flag in result.flags:
            codes[flag.code] = codes.get(flag.code, 0) + 1
        both = (("in-plane", result.in_plane, truth.in_plane_mm), ("axial", result.axial, truth.axial_mm))
        for direction, width, true in both:
            assert width is not None
            interval = t_interval(width.fwhm_mm, width.se_mm, width.df)
            assert interval is not None
            found[direction].append((width.fwhm_mm - true, width.se_mm or 0.0, interval[0] <= true <= interval[1]))
    seconds = (time.perf_counter() - started) / (runs if noise else 1)
    for direction, rows in found.items():
        error, se, hit = (np.array(column, dtype=float) for column in zip(*rows, strict=True))
        scatter = float(error.std(ddof=1)) if len(rows) > 1 else float("nan")
        ratio = float(np.sqrt(np.mean(se**2))) / scatter if len(rows) > 1 else float("nan")
        print(
            f"reference_image {name:10s} {truth.in_plane_mm:4.1f}/{truth.axial_mm:4.1f} mm {direction:8s} "
            f"noise {100 * noise:3.0f} % bias {error.mean():+.4f} scatter {scatter:.4f} rms se/scatter {ratio:.2f} "
            f"coverage {100 * hit.mean():.0f} % runs {len(rows)} seconds {seconds:.1f}",
            flush=True,
        )
    print("  flags:", codes or "none", flush=True)


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--runs", type=int, default=40)
    runs = parser.parse_args().runs
    moved = {"shift_mm": (12.0, -8.0, 6.0), "turn_deg": (4.0, -3.0, 7.0)}
    head, coarse = invented_head(2.0), invented_head(3.0)
    two, three, four = (2.0,) * 3, (3.0,) * 3, (4.0,) * 3
    for in_plane, axial, image_voxel, shape in (
        (3.0, 4.0, two, (80, 88, 64)),
        (5.0, 7.0, two, (80, 88, 64)),
        (8.0, 6.0, four, (46, 50, 40)),
        (15.0, 10.0, four, (56, 60, 52)),
    ):
        truth = Truth(in_plane, axial, **moved)
        run_case("head", head, two, shape, image_voxel, truth, noise=0.0, runs=1)
    far = Truth(5.0, 7.0, shift_mm=(-20.0, 20.0, 10.0), turn_deg=(10.0, 0.0, 0.0), flip=(-1, 1, 1))
    run_case("head far", head, two, (92, 100, 72), two, far, noise=0.0, runs=1)
    run_case("head", coarse, three, (58, 64, 48), three, Truth(6.0, 7.0, **moved), noise=0.1, runs=runs)
    template = template_head()
    if template is not None:
        truth = Truth(5.0, 6.0, **moved)
        run_case("template", template, (1.0,) * 3, (200, 200, 90), (2.0, 2.0, 2.0), truth, noise=0.0, runs=1)
        run_case("template", template, (1.0,) * 3, (200, 200, 90), (2.0, 2.0, 2.0), truth, noise=0.1, runs=min(runs, 3))


if __name__ == "__main__":
    main()
