"""Time and memory of smoothing scans on file, whole processes, beside nibabel + scipy.ndimage + nibabel.

python tests/benchmarks/scan_file_speed.py [--shape 256 256 128] [--frames 40] [--repeats 3]

First table: .nii.gz to .nii.gz, processor time of the whole process (start included), three inputs. Then the peak
memory of a scan with many frames, in frames of float32 over what the interpreter and its modules take.
"""

import argparse
import json
import os
import subprocess
import sys
import tempfile
from pathlib import Path

SCRIPTS = Path(__file__).parents[2] / "scripts"
ONE_THREAD = {"OPENBLAS_NUM_THREADS": "1", "OMP_NUM_THREADS": "1"}

PLAIN = """
import sys
import nibabel as nib, numpy as np
from scipy.ndimage import gaussian_filter
image = nib.load(sys.argv[1])
sigma = [w / v / 2.3548 for w, v in zip((8.0, 8.0, 8.0), image.header.get_zooms()[:3])]
smoothed = gaussian_filter(image.get_fdata(dtype=np.float32), sigma)
nib.save(nib.Nifti1Image(smoothed, image.affine), sys.argv[2])
"""

MEMORY = """
import resource, sys
from pathlib import Path
from evenblur import command
from evenblur.images.harmonise import harmonise_scan
scan = Path(sys.argv[1])
before = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
harmonise_scan(scan, in_plane_mm=8.0, axial_mm=8.0, out=scan.with_name("h.nii.gz"), record=scan.with_name("h.json"))
print(1024 * (resource.getrusage(resource.RUSAGE_SELF).ru_maxrss - before))
"""

MAKE = """
import sys, json
import nibabel as nib, numpy as np
from isal import igzip
path, shape, frames, kind = json.loads(sys.argv[1])
random = np.random.default_rng(0)
x, y, z = np.meshgrid(*(np.arange(n) - n / 2 for n in shape), indexing="ij", sparse=True)
body = ((x / (0.35 * shape[0])) ** 2 + (y / (0.25 * shape[1])) ** 2 + 0 * z < 1) * 500.0 + 2
header = nib.Nifti1Header()
header.set_data_shape((*shape, frames) if frames > 1 else shape)
header.set_data_dtype(kind)
header.set_sform(np.diag([2.0, 2, 2, 1]), 1)
header["vox_offset"] = 352
with igzip.open(path, "wb", 1) as stream:
    stream.write(header.binaryblock + bytes(4))
    for _ in range(frames):
        stream.write(random.poisson(body).astype(kind).tobytes(order="F"))
"""


def spent(command: list[str]) -> float:
    """Processor time (s) of a process."""
    before = os.times()
    subprocess.run(command, env={**os.environ, **ONE_THREAD, "PYTHONPATH": str(SCRIPTS)}, check=True)
    after = os.times()
    return after.children_user + after.children_system - before.children_user - before.children_system


def make(path: Path, shape: list[int], frames: int, kind: str) -> None:
    """Write an invented scan, noise in an elliptic cylinder."""
    subprocess.run([sys.executable, "-c", MAKE, json.dumps([str(path), shape, frames, kind])], check=True)


def main() -> None:
    """Print both tables."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--shape", type=int, nargs=3, default=[256, 256, 128])
    parser.add_argument("--frames", type=int, default=40)
    parser.add_argument("--repeats", type=int, default=3)
    given = parser.parse_args()
    with tempfile.TemporaryDirectory() as folder:
        scan, out, record = (Path(folder) / name for name in ("s.nii.gz", "h.nii.gz", "h.json"))
        step = [sys.executable, str(SCRIPTS / "smooth_scan.py"), "--image", str(scan)]
        step += ["--in-plane-mm", "8", "--axial-mm", "8", "--out", str(out), "--record", str(record)]
        print("number type  evenblur_s  plain_s  ratio  size_ratio")
        for kind in ("int16", "float32"):
            make(scan, given.shape, 1, kind)
            ours = min(spent(step) for _ in range(given.repeats))
            size = out.stat().st_size
            plain = min(spent([sys.executable, "-c", PLAIN, str(scan), str(out)]) for _ in range(given.repeats))
            print(f"{kind:11s}  {ours:10.2f}  {plain:7.2f}  {plain / ours:5.1f}  {size / out.stat().st_size:10.3f}")
        shape = [length // 2 for length in given.shape]
        print(f"\npeak memory in frames of {shape[0]} x {shape[1]} x {shape[2]} float32")
        for kind in ("int16", "float32"):
            for frames in (1, given.frames):
                make(scan, shape, frames, kind)
                command = [sys.executable, "-c", MEMORY, str(scan)]
                environment = {**os.environ, "PYTHONPATH": str(SCRIPTS)}
                taken = int(subprocess.run(command, env=environment, check=True, capture_output=True).stdout)
                print(
                    f"{kind:11s}  {frames:3d} frames  {taken / (4 * shape[0] * shape[1] * shape[2]):5.2f}", flush=True
                )


if __name__ == "__main__":
    main()
