"""Gather the records of several scans or phantoms: see that each is whole, and note their hashes.

Inputs: records, each with its image beside it where it states an image's hash. Output: a note (JSON) with the hash of
every record. A record that does not fit its image stops the step.
"""

from pathlib import Path

from evenblur.command import Arguments, run, write_record


def main(arguments: list[str]) -> None:
    """Read the arguments, look at the records, write the note."""
    parser = Arguments(description=__doc__)
    parser.add_argument("--out", required=True, type=Path, help="note to write")
    parser.add_argument("records", nargs="+", type=Path, help="records to gather")
    options = parser.parse_args(arguments)

    from evenblur.study.wholeness import note_on_records

    write_record(options.out, note_on_records(options.records))


if __name__ == "__main__":
    raise SystemExit(run(main))
