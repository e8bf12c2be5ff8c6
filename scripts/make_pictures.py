"""Draw a few scans of each site before and after smoothing, for the report.

Inputs: the study folder with its tables, its plan, the scans and their harmonised images. Output: pictures.json under
the audit folder of the results.
"""

from pathlib import Path

from evenblur.command import Arguments, run, write_record


def main(arguments: list[str]) -> None:
    """Read the arguments, draw the pictures, write the record."""
    parser = Arguments(description=__doc__)
    parser.add_argument("--study-dir", type=Path, default=Path(), help="the study folder (default: here)")
    options = parser.parse_args(arguments)

    from evenblur.audit.scan_pictures import pictures_of_study

    results, pictures = pictures_of_study(options.study_dir)
    write_record(results / "audit" / "pictures.json", pictures)


if __name__ == "__main__":
    raise SystemExit(run(main))
