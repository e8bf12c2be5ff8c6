"""Smooth one scan by its period's kernel and write the harmonised image with its record.

python scripts/smooth_scan.py --image S.nii.gz --in-plane-mm 4.2 --axial-mm 3.9 --out H.nii.gz --record H.json
"""

import json
import sys
from pathlib import Path
from typing import Any

from evenblur import command
from evenblur.errors import InputError
from evenblur.images.harmonise import harmonise_scan


def main(arguments: list[str]) -> None:
    """Read the arguments, smooth, write."""
    parser = command.Arguments(prog="smooth_scan.py", description="Smooth one scan by a Gaussian of given width.")
    parser.add_argument(
        "--image",
        type=Path,
        required=True,
        help="the scan: a volume that nibabel reads, or a folder with one DICOM series",
    )
    parser.add_argument("--in-plane-mm", type=float, required=True, help="kernel width across the bed, FWHM in mm")
    parser.add_argument("--axial-mm", type=float, required=True, help="kernel width along the bed, FWHM in mm")
    parser.add_argument("--out", type=Path, required=True, help="the harmonised image, .nii or .nii.gz")
    parser.add_argument("--record", type=Path, required=True, help="its record, .json")
    parser.add_argument("--expect-sha256", help="refuse the scan if its file has another SHA-256 (empty: any)")
    parser.add_argument("--facts", help="what else the record should say: a JSON object, or a file that holds one")
    parser.add_argument("--code-token", help="hash of the smoothing code, for the record's smoothing_version")
    given = parser.parse_args(arguments)
    harmonise_scan(
        given.image,
        in_plane_mm=given.in_plane_mm,
        axial_mm=given.axial_mm,
        out=given.out,
        record=given.record,
        expected_sha256=given.expect_sha256 or None,
        facts=_facts(given.facts),
        code_token=given.code_token,
    )


def _refuse_constant(word: str) -> None:
    raise ValueError(f"{word} is no JSON number")


def _facts(given: str | None) -> dict[str, Any]:
    if given is None:
        return {}
    try:
        facts = json.loads(
            given if given.lstrip().startswith("{") else Path(given).read_text(encoding="utf-8"),
            parse_constant=_refuse_constant,
        )
    except (OSError, ValueError) as error:
        raise InputError("--facts", f"cannot be read ({error})", "give a JSON object or a file with one") from error
    if not isinstance(facts, dict):
        raise InputError("--facts", "is not a JSON object", "give a JSON object or a file with one")
    return facts


if __name__ == "__main__":
    sys.exit(command.run(main))
