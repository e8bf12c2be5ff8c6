"""Say what changed in a study since its last recorded state and what follows from it, without running anything.

Inputs: the study's settings and tables, its images, history.tsv, the plan if there is one. Output: sentences.
"""

from pathlib import Path

from evenblur.command import Arguments, run


def main(arguments: list[str]) -> None:
    """Read the arguments, compare, print."""
    parser = Arguments(description=__doc__)
    parser.add_argument("study", type=Path, help="the study folder")
    options = parser.parse_args(arguments)

    from evenblur.printable import printable
    from evenblur.study.history_tasks import Chronicle
    from evenblur.study.ledger import Ledger
    from evenblur.study.reading import load_study
    from evenblur.study.tasks import Tasks

    program = Path(__file__).resolve().parent.parent
    study = load_study(options.study)
    # The ledger is looked at and not stored: nothing of the study is changed.
    tasks = Tasks(study, Ledger(options.study), options.study, program)
    for sentence in Chronicle(tasks, options.study, program).explained():
        print(printable(sentence))


if __name__ == "__main__":
    raise SystemExit(run(main))
