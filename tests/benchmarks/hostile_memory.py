"""How much memory and time the steps take on images made to hurt: one line an image and step.

    .venv/bin/python tests/benchmarks/hostile_memory.py [NAME ...]

Ends with 1 where a step took more than 2 GiB, ran longer than a minute, printed a traceback or used the image.
"""

import json
import os
import subprocess
import sys
import tempfile
import time
from pathlib import Path

TESTS = Path(__file__).resolve().parents[1]
SCRIPTS = TESTS.parent / "scripts"
sys.path[:0] = [str(TESTS), str(SCRIPTS)]

if sys.argv[1:2] == ["--make"]:
    import hostile_images

    target = Path(sys.argv[3])
    written = {**hostile_images.BOMBS, **hostile_images.BESIDE}[sys.argv[2]](target)
    print(written.relative_to(target).as_posix())
    sys.exit()

LIMIT_MIB, LIMIT_S = 2048, 60


NAMES = subprocess.run(
    [sys.executable, "-c", "import hostile_images as h; print(*h.BOMBS, *h.BESIDE, sep='\\n')"],
    env={**os.environ, "PYTHONPATH": str(TESTS)},
    check=True,
    capture_output=True,
    text=True,
).stdout.splitlines()


def steps(image: str) -> dict[str, list[str]]:
    """The three steps that open an image, as calls in the study folder."""
    widths = ["--in-plane-mm", "5", "--axial-mm", "5", "--out", "h.nii.gz", "--record", "h.json"]
    kind = ["--tolerant", "--kind", "point_source", "--out", "p.json"]
    return {
        "take_in_image": [f"--image={image}", "--record", "i.json"],
        "measure_resolution": [f"--image={image}", *kind],
        "smooth_scan": [f"--image={image}", *widths],
    }


def call(step: str, arguments: list[str], folder: Path) -> tuple[int, str, float, float]:
    """Exit code, standard error, peak memory (MiB) and time (s) of a step."""
    with (folder / "said").open("w+b") as said:
        started = time.monotonic()
        process = subprocess.Popen(
            [sys.executable, str(SCRIPTS / f"{step}.py"), *arguments], cwd=folder, stdout=said, stderr=said
        )
        while True:
            done, status, usage = os.wait4(process.pid, os.WNOHANG)
            if done:
                break
            if time.monotonic() - started > LIMIT_S:
                process.kill()
            time.sleep(0.01)
        process.returncode = os.waitstatus_to_exitcode(status)
        said.seek(0)
        text = said.read().decode("utf-8", "replace")
    return process.returncode, text, usage.ru_maxrss / 1024, time.monotonic() - started


def make(name: str, folder: Path) -> str:
    """Write an image in a process of its own: what that takes must not count as the step's."""
    command = [sys.executable, __file__, "--make", name, str(folder)]
    return subprocess.run(command, check=True, capture_output=True, text=True).stdout.strip()


def main(wanted: list[str]) -> int:
    """Run them all, or those that are named."""
    bad = 0
    for name in NAMES:
        if wanted and name not in wanted:
            continue
        with tempfile.TemporaryDirectory() as place:
            folder = Path(place)
            image = make(name, folder)
            for step, arguments in steps(image).items():
                code, text, memory, seconds = call(step, arguments, folder)
                holds = json.loads((folder / "i.json").read_text())["holds"] if (folder / "i.json").exists() else None
                wrong = memory > LIMIT_MIB or seconds > LIMIT_S or "Traceback" in text
                wrong |= code not in (0, 2) or (
                    not name.startswith("sidecar") and (not holds or (folder / "h.json").exists())
                )
                wrong |= (folder / "executed").exists() or len(text.strip().splitlines()) > 8
                bad += wrong
                sign = "!!" if wrong else "  "
                print(f"{sign} {name:32} {step:18} {memory:7.0f} MiB {seconds:5.1f} s  exit {code} {holds}", flush=True)
                if wrong:
                    print(text[-2000:])
    print(f"{bad} steps went wrong")
    return 1 if bad else 0


if __name__ == "__main__":
    raise SystemExit(main(sys.argv[1:]))
