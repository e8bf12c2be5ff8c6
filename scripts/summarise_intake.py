"""Say what each site has to mend before the study can use all of its images.

Inputs: the study's tables and the intake records. Output: lines on the terminal, nothing else.
"""

from pathlib import Path

from evenblur.command import Arguments, run


def main(arguments: list[str]) -> None:
    """Read the arguments, print by site what to mend and what to know, and the counts."""
    parser = Arguments(description=__doc__)
    parser.add_argument("--study-dir", default=Path(), type=Path, help="study folder")
    options = parser.parse_args(arguments)

    from evenblur.audit.check import check_lines
    from evenblur.study.reading import load_study
    from evenblur.study.records import read_intake

    study = load_study(options.study_dir)
    print("\n".join(check_lines(study, **read_intake(options.study_dir, study))))


if __name__ == "__main__":
    raise SystemExit(run(main))
