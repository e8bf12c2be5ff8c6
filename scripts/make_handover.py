"""Pack the results of a run into a bag for the auditor.

Inputs: the study folder with its settings, tables, records and phantom images. Output: the folder `handover` of the
results, a BagIt bag (RFC 8493) whose tag manifest is written last.
"""

from pathlib import Path

from evenblur.command import Arguments, run


def main(arguments: list[str]) -> None:
    """Read the arguments, pack the bag."""
    parser = Arguments(description=__doc__)
    parser.add_argument("--study-dir", default=Path(), type=Path, help="the study folder (default: here)")
    options = parser.parse_args(arguments)

    from evenblur.handover.packing import pack_handover
    from evenblur.study.history import today

    program_dir = Path(__file__).resolve().parent.parent
    pack_handover(options.study_dir, program_dir=program_dir, day=today())


if __name__ == "__main__":
    raise SystemExit(run(main))
