"""Take the README's picture of a report anew. For developers; needs Chromium and the developers' packages.

Inputs: the demonstration's report (run `python3 scripts/start.py demo` first). Output: config/report.png.
"""

import shutil
import subprocess
import tempfile
from pathlib import Path

from evenblur.command import Arguments, run
from evenblur.errors import InputError

PROGRAM = Path(__file__).resolve().parents[1]
PICTURE = PROGRAM / "config" / "report.png"
LARGEST_BYTES = 150_000
_COLOURS = 64


def main(arguments: list[str]) -> None:
    """Read the arguments, let Chromium show the page, keep the picture small."""
    parser = Arguments(description=__doc__)
    parser.add_argument("--report", type=Path, default=PROGRAM / "results" / "audit" / "report.html", help="the page")
    parser.add_argument("--part", default="", help="name of the part that the picture begins at (default: the top)")
    parser.add_argument("--size", nargs=2, type=int, default=(1200, 900), metavar=("WIDTH", "HEIGHT"), help="in pixels")
    parser.add_argument("--out", type=Path, default=PICTURE, help="the picture to write")
    options = parser.parse_args(arguments)

    from PIL import Image

    if not options.report.is_file():
        raise InputError(str(options.report), "is not there", "run the demonstration first")
    browser = next(filter(None, map(shutil.which, ("chromium", "chromium-browser", "google-chrome"))), None)
    if browser is None:
        raise InputError("Chromium", "is not on the path", "install it")
    with tempfile.TemporaryDirectory() as name:
        taken = Path(name) / "taken.png"
        command = [browser, "--headless", "--no-sandbox", "--disable-gpu", "--hide-scrollbars", "--no-first-run"]
        command += [f"--user-data-dir={name}/profile", f"--screenshot={taken}"]
        command += [f"--window-size={options.size[0]},{options.size[1]}"]
        page = options.report.resolve().as_uri() + (f"#{options.part}" if options.part else "")
        subprocess.run([*command, page], check=False, capture_output=True, timeout=120)
        if not taken.is_file():
            raise InputError(str(options.report), "could not be shown by Chromium", "open it there to see why")
        small = Path(name) / "small.png"
        Image.open(taken).convert("RGB").quantize(_COLOURS).save(small, optimize=True)
        size = small.stat().st_size
        if size > LARGEST_BYTES:
            raise InputError(str(options.out), f"would have {size} bytes", "take a smaller --size")
        shutil.copyfile(small, options.out)
    print(f"{options.out}: {size} bytes")


if __name__ == "__main__":
    raise SystemExit(run(main))
