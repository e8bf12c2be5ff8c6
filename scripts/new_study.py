"""Begin a study: a folder with commented study.yaml and tables, filled in from a data set where there is one.

Inputs: a BIDS data set, a folder of DICOM files, or none. Outputs: STUDY/config/ (study.yaml, setups.tsv, phantoms.tsv,
scans.tsv, README.md) and, for DICOM, STUDY/images/ with links. Images are neither copied nor changed, and nothing is
overwritten. From BIDS, any Python from 3.11 on will do; for DICOM use the program's own environment:
`python3 scripts/start.py new STUDY ...` sees to that.
"""

import shlex
import sys
from pathlib import Path

if sys.version_info < (3, 11):  # noqa: UP036 - any Python may be tried, and an older one cannot read the library
    sys.exit("new_study.py: Evenblur needs Python 3.11 or newer; start it with a newer one")

from evenblur.command import Arguments, run
from evenblur.errors import InputError

PROGRAM = Path(__file__).resolve().parents[1]


def main(arguments: list[str]) -> None:
    """Read the arguments, look through the data sets, write the study's files, say what is to be filled in."""
    parser = Arguments(
        description="Begin a study: commented study.yaml and tables, filled in from a data set where there is one.",
        epilog="Institutions' names become hashed labels, as site-3f09c2: one name has one label everywhere.",
    )
    parser.add_argument("study", type=Path, metavar="STUDY", help="folder of the new study")
    parser.add_argument(
        "--from-bids",
        type=Path,
        action="append",
        default=[],
        metavar="BIDS",
        help="a BIDS data set (may be given several times)",
    )
    parser.add_argument(
        "--from-dicom",
        type=Path,
        action="append",
        default=[],
        metavar="DIR",
        help="a folder of DICOM files in any order (may be given several times)",
    )
    parser.add_argument("--title", help="the study's title (default: the BIDS data set's name)")
    parser.add_argument(
        "--keep-names", action="store_true", help="make sites' labels of institutions' names, not of their hashes"
    )
    options = parser.parse_args(arguments)

    from evenblur.newstudy.bids import look_through_bids
    from evenblur.newstudy.found import Look, clean
    from evenblur.newstudy.proposing import propose
    from evenblur.newstudy.writing import refuse_existing, write_study
    from evenblur.printable import printable

    study_dir = options.study.resolve()
    refuse_existing(study_dir)
    look = Look()
    for source, folder in enumerate(options.from_bids, start=1):
        look_through_bids(folder.resolve(), look, source=source)
    for source, folder in enumerate(options.from_dicom, start=len(options.from_bids) + 1):
        try:
            from evenblur.newstudy.dicom import look_through_dicom
        except ImportError as error:
            mend = "call: python3 scripts/start.py new STUDY --from-dicom DIR"
            raise InputError("--from-dicom", f"this Python lacks {error.name}", mend) from None
        look_through_dicom(folder.resolve(), look, source=source)
    proposal = propose(look, study_dir=study_dir, keep_names=options.keep_names)
    title = clean(options.title) or look.title or "A study without a title yet"
    write_study(study_dir, proposal, program=PROGRAM, title=title, modality=look.modality)

    counts = [f"{len(rows)} {name}" for name, (_, rows) in proposal.tables.items()]
    print(f"{options.study}: begun with {', '.join(counts)}")
    for line in look.left_out:
        print(printable(f"Left out: {line}"))
    if proposal.lone_sessions:
        print(f"Scans without a session: {proposal.lone_sessions}; they stand in scans.tsv with session 1")
    if not proposal.scans:
        print("Fill in the tables in config/; config/README.md explains every column.")
    for table, column, count in proposal.empty_cells():
        print(f"To fill in: config/{table}.tsv, column {column}, in {count} of {len(proposal.tables[table][1])} rows")
    print(f"Then: python3 scripts/start.py run {shlex.quote(str(options.study))} check")


if __name__ == "__main__":
    raise SystemExit(run(main))
