"""Move results that no row stands for (withdrawn subjects, replaced sessions) out of the results, to STUDY/withdrawn/.

Inputs: the study's settings and tables, the plan. Outputs: the files below STUDY/withdrawn/ under the same path, and
a line a file in STUDY/history.tsv. Nothing is deleted and nothing is overwritten.
"""

from pathlib import Path

from evenblur.command import Arguments, run


def main(arguments: list[str]) -> None:
    """Read the arguments, find the files, record and move them."""
    parser = Arguments(description=__doc__)
    parser.add_argument("study", type=Path, help="the study folder")
    parser.add_argument("--dry-run", "-n", action="store_true", help="only say what would be moved")
    parser.add_argument("--date", help="day of the new lines, year-month-day (default: today, UTC)")
    options = parser.parse_args(arguments)

    from evenblur.printable import printable
    from evenblur.study.history import today
    from evenblur.study.reading import load_study
    from evenblur.study.tidying import tidy

    places = tidy(options.study, load_study(options.study), date=today(options.date), dry_run=options.dry_run)
    for name, place in places.items():
        print(printable(f"{name} -> {place}"))
    if not places:
        print("Nothing to tidy: a row stands for every result.")
    elif options.dry_run:
        print(f"{len(places)} files would be moved; nothing was.")
    else:
        print(f"{len(places)} files moved and noted in {options.study / 'history.tsv'}; run the study again.")


if __name__ == "__main__":
    raise SystemExit(run(main))
