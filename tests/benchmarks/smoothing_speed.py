"""Speed of smoothing a volume, beside scipy.ndimage, SimpleITK and plain copies, in one run on one thread each.

python tests/benchmarks/smoothing_speed.py [--shape 256 256 128] [--voxel-mm 2] [--repeats 5]

The methods take turns and each counts with its best processor time, so other work on the machine matters little.
Ratios above 1 say how much longer the other one takes.
"""

import argparse
import sys
import time
from collections.abc import Callable
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parents[2] / "scripts"))

from evenblur import command  # noqa: I001  (sets one thread before numpy is imported)

import numpy as np
import SimpleITK
from scipy.ndimage import gaussian_filter

from evenblur.smoothing import plan_smoothing, smooth_volume
from evenblur.widths import sigma_from_fwhm

WIDTHS_MM = (2.0, 4.0, 6.0, 8.0, 12.0)
ONES = (1.0, 1.0, 1.0)


def best_times(methods: dict[str, Callable[[], object]], repeats: int) -> dict[str, float]:
    """Best processor time (ms) of each method, the methods taking turns."""
    best = dict.fromkeys(methods, float("inf"))
    for _ in range(repeats):
        for name, method in methods.items():
            start = time.process_time()
            method()
            best[name] = min(best[name], 1e3 * (time.process_time() - start))
    return best


def compare(shape: tuple[int, int, int], voxel_mm: float, repeats: int) -> None:
    """Print the table of times and ratios."""
    volume = np.asfortranarray(np.random.default_rng(0).random(shape, dtype=np.float32))
    image = SimpleITK.GetImageFromArray(np.ascontiguousarray(volume.T))
    image.SetSpacing((voxel_mm,) * 3)
    sizes = (voxel_mm,) * 3
    print(f"{shape[0]} x {shape[1]} x {shape[2]} float32, {voxel_mm:g} mm voxels; ms of processor time, one thread")
    print("width_mm  route              evenblur  scipy  scipy6  simpleitk  3copies |  xscipy  xscipy6  xsitk  /copy")
    for width in WIDTHS_MM:
        fwhm, sigma = (width,) * 3, sigma_from_fwhm(width)
        recursive = SimpleITK.SmoothingRecursiveGaussianImageFilter()
        recursive.SetNumberOfThreads(1)
        recursive.SetSigma(sigma)
        times = best_times(
            {
                "ours": lambda fwhm=fwhm: smooth_volume(volume, voxel_mm=sizes, fwhm_mm=fwhm),
                "scipy": lambda s=sigma / voxel_mm: gaussian_filter(volume, s),
                "scipy6": lambda s=sigma / voxel_mm: gaussian_filter(volume, s, truncate=6.0),
                "sitk": lambda: recursive.Execute(image),  # noqa: B023  (called within the turn)
                "copies": lambda: [volume.copy(order="K") for _ in range(3)],
            },
            repeats,
        )
        route = " ".join(plan_smoothing(shape, voxel_mm=sizes, fwhm_mm=fwhm).route)
        numbers = [times[name] for name in ("ours", "scipy", "scipy6", "sitk", "copies")]
        ratios = [times[name] / times["ours"] for name in ("scipy", "scipy6", "sitk")]
        ratios.append(times["ours"] / times["copies"])
        cells = [
            f"{value:{size}}" for value, size in zip(numbers, ("8.1f", "5.0f", "6.0f", "9.0f", "7.1f"), strict=True)
        ]
        last = [f"{value:{size}}" for value, size in zip(ratios, ("6.1f", "7.1f", "5.1f", "5.1f"), strict=True)]
        print(f"{width:8g}  {route:17s}  {'  '.join(cells)} |  {'  '.join(last)}", flush=True)


def route_costs(repeats: int) -> None:
    """Print what each route costs a voxel and axis: the source of the cost constants in evenblur.smoothing."""
    print("\nns a voxel and axis (mean of the three axes), by route forced through the kernel's own choice")
    print("length  width_voxels  route   ns")
    for length, width in ((64, 1.0), (128, 1.0), (256, 1.0), (512, 1.0), (256, 4.0), (256, 12.0), (512, 40.0)):
        volume = np.random.default_rng(0).random((length, length, 64), dtype=np.float32)
        for route in ("image", "fourier"):
            spent, names = 0.0, set()
            for axis in (0, 1):
                fwhm = tuple(width if other == axis else 0.0 for other in range(3))
                names.add(plan_smoothing(volume.shape, voxel_mm=ONES, fwhm_mm=fwhm, route=route).route[axis])
                for turned in (volume, volume.transpose(2, 1, 0).copy().transpose(2, 1, 0)):
                    call = {
                        "it": lambda v=turned, f=fwhm, r=route: smooth_volume(v, voxel_mm=ONES, fwhm_mm=f, route=r),
                        "copy": lambda v=turned: smooth_volume(v, voxel_mm=ONES, fwhm_mm=(0.0, 0.0, 0.0)),
                    }
                    times = best_times(call, repeats)
                    spent += times["it"] - times["copy"]
            print(
                f"{length:6d}  {width:12g}  {'/'.join(sorted(names)):6s}  {1e6 * spent / 4 / volume.size:4.2f}",
                flush=True,
            )


def main() -> None:
    """Print both tables."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--shape", type=int, nargs=3, default=(256, 256, 128))
    parser.add_argument("--voxel-mm", type=float, default=2.0)
    parser.add_argument("--repeats", type=int, default=5)
    given = parser.parse_args()
    SimpleITK.ProcessObject.SetGlobalDefaultNumberOfThreads(1)
    compare(tuple(given.shape), given.voxel_mm, given.repeats)
    route_costs(min(3, given.repeats))


assert command  # imported for what it sets

if __name__ == "__main__":
    main()
