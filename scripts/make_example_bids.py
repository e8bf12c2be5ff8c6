"""Make a small BIDS data set of three invented sites, to try `new_study.py` on.

Inputs: none; everything is invented by `evenblur.demonstration`. Outputs: the data set's folder.
"""

from pathlib import Path

from evenblur.command import Arguments, run


def main(arguments: list[str]) -> None:
    """Read the arguments, make the data set, say what is in it."""
    parser = Arguments(description="Make a small BIDS data set of three sites (all invented).")
    parser.add_argument(
        "folder", type=Path, metavar="FOLDER", help="the data set's folder, which must not be there yet"
    )
    folder = parser.parse_args(arguments).folder

    from evenblur.demonstration.bids_example import make_bids_example

    scans, phantoms = make_bids_example(folder)
    print(f"{folder}: {scans} scans of invented subjects, {phantoms} scans of a travelling phantom, three sites")


if __name__ == "__main__":
    raise SystemExit(run(main))
