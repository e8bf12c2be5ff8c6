"""Measure the width of one phantom image.

Inputs: the image, its kind, its details (YAML). Output: the resolution record (JSON). A readable summary is printed.
"""

import argparse
from collections.abc import Callable
from pathlib import Path
from typing import Any

from evenblur.command import Arguments, run, write_record
from evenblur.errors import InputError


def main(arguments: list[str]) -> None:
    """Read the arguments, measure the phantom, write its record."""
    parser = Arguments(description=__doc__)
    parser.add_argument("--kind", required=True, help="kind of phantom, as uniform_cylinder")
    parser.add_argument("--image", required=True, type=Path, help="image of the phantom")
    given = parser.add_mutually_exclusive_group()
    given.add_argument("--details", type=Path, help="YAML file with the phantom's facts")
    given.add_argument("--details-text", default="{}", help="the same as text, as '{radius_mm: 100}'")
    parser.add_argument("--out", required=True, type=Path, help="record to write")
    parser.add_argument("--phantom", default="", help="label of the phantom")
    parser.add_argument("--setup", default="", help="label of the setup")
    parser.add_argument("--phantom-session", default="", help="label of the phantom session")
    parser.add_argument("--expect-sha256", help="identity that the image must still have")
    parser.add_argument("--expect-reference-sha256", help="identity that the reference of the details must still have")
    parser.add_argument("--tolerant", action="store_true", help="write a record with a flag where there is no width")
    parser.add_argument("--cache", default="", help="closed folder that keeps measurements (empty: none)")
    parser.add_argument("--code-token", default="", help="hash of the measuring code, which the cache needs")
    options = parser.parse_args(arguments)

    from evenblur.measuring import measure_phantom

    details = _read_details(options)
    labels = {"phantom": options.phantom, "setup": options.setup, "phantom_session": options.phantom_session}

    def measure() -> dict[str, Any]:
        return measure_phantom(
            options.image,
            kind=options.kind,
            details=details,
            name=options.image.as_posix(),
            expected_sha256=options.expect_sha256 or None,
            expected_reference_sha256=options.expect_reference_sha256 or None,
            labels=labels,
            tolerant=options.tolerant,
        )

    record = _from_cache(options, details, labels, measure) if options.cache else measure()
    write_record(options.out, record)
    print(_summary(record))


def _from_cache(
    options: argparse.Namespace,
    details: dict[str, Any],
    labels: dict[str, str],
    measure: Callable[[], dict[str, Any]],
) -> dict[str, Any]:
    """The record from the cache, or measured and kept there; an image that changed meanwhile is left to `measure`."""
    from evenblur.images.digests import image_sha256
    from evenblur.measuring_cache import measured_once, measurement_facts

    if not options.code_token:
        raise InputError("--cache", "nothing says which code measures", "give --code-token too")
    reference = Path(details["reference"]) if "reference" in details else None
    if not options.image.exists() or (reference is not None and not reference.exists()):
        return measure()
    sha256 = image_sha256(options.image)
    reference_sha256 = image_sha256(reference) if reference is not None else None
    expected = (options.expect_sha256 or sha256, options.expect_reference_sha256 or reference_sha256)
    if expected != (sha256, reference_sha256):
        return measure()
    facts = measurement_facts(
        kind=options.kind,
        details=details,
        code_token=options.code_token,
        sha256=sha256,
        reference_sha256=reference_sha256,
    )
    named = {**labels, "path": options.image.as_posix()}
    record, known = measured_once(Path(options.cache), facts, record_facts=named, measure=measure)
    if known:
        print("Measured before: the record is from the cache.")
    return record


def _read_details(options: argparse.Namespace) -> dict[str, Any]:
    from evenblur.study.rows import check_details
    from evenblur.study.settings import KINDS
    from evenblur.study.yaml_reading import parse_yaml

    where = str(options.details or "--details-text")
    if options.kind not in KINDS:
        raise InputError(f"--kind {options.kind}", "no such kind of phantom", f"known: {', '.join(KINDS)}")
    try:
        text = options.details.read_text(encoding="utf-8-sig") if options.details else options.details_text
        details = parse_yaml(text) or {}
        if not isinstance(details, dict):
            raise ValueError("details are YAML keys and values, as {radius_mm: 100}")
        return check_details(options.kind, details)
    except OSError as error:
        raise InputError(where, f"cannot be read ({error.strerror})", "name a file with the details") from error
    except ValueError as error:
        raise InputError(where, str(error), "correct the details") from error


def _summary(record: dict[str, Any]) -> str:
    lines = [f"{record['input']['path']} ({record['kind']})"]
    for direction in ("in_plane", "axial"):
        width = record[direction]
        words = direction.replace("_", "-")
        if width is None:
            lines.append(f"  {words:9} no width")
        elif width["se_mm"] is None:
            lines.append(f"  {words:9} {width['fwhm_mm']:.2f} mm, standard error unknown")
        else:
            lines.append(f"  {words:9} {width['fwhm_mm']:.2f} mm, standard error {width['se_mm']:.2f} mm")
    lines += [f"  flag {flag['code']}: {flag['text']}" for flag in record["flags"]]
    return "\n".join(lines)


if __name__ == "__main__":
    raise SystemExit(run(main))
