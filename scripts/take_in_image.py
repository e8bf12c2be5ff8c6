"""Take in one image: write the record of what it is and whether it can be used.

Inputs: the image, if it is there. Output: the intake record (JSON). A bad image is a record with a reason.
"""

from pathlib import Path

from evenblur.command import Arguments, run, write_record


def main(arguments: list[str]) -> None:
    """Read the arguments, take the image in, write its record."""
    parser = Arguments(description=__doc__)
    parser.add_argument("--image", required=True, type=Path, help="image file, or folder with one DICOM series")
    parser.add_argument("--item", choices=("scan", "phantom"), default="scan", help="what the image is")
    parser.add_argument("--key", default="", help="its label in the study")
    parser.add_argument("--expect-sha256", help="identity that the image must still have")
    parser.add_argument("--record", required=True, type=Path, help="record to write")
    options = parser.parse_args(arguments)

    from evenblur.intake import take_in_image

    record = take_in_image(
        options.image,
        name=options.image.as_posix(),
        item=options.item,
        key=options.key,
        expected_sha256=options.expect_sha256 or None,
    )
    write_record(options.record, record)


if __name__ == "__main__":
    raise SystemExit(run(main))
