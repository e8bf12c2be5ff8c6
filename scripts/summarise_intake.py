"""Say what the sites have to mend before the study can use all of their images.

Inputs: the study's tables and the intake records. Output: lines on the terminal, nothing else.
"""

from pathlib import Path

from evenblur.command import Arguments, read_record, run


def main(arguments: list[str]) -> None:
    """Read the arguments, print a line for each image that cannot be used, and the counts."""
    parser = Arguments(description=__doc__)
    parser.add_argument("--study-dir", default=Path(), type=Path, help="study folder")
    options = parser.parse_args(arguments)

    from evenblur.study.reading import load_study
    from evenblur.study.records import Layout

    study = load_study(options.study_dir)
    layout = Layout(study)
    names = [layout.intake(row) for row in study.phantoms] + [layout.intake(row) for row in study.scans]
    records = [read_record(options.study_dir / name) for name in names]
    faulty = [record for record in records if record["holds"]]
    for record in faulty:
        for code, problem in zip(record["holds"], record["problems"], strict=True):
            print(f"{record['item']} {record['key']}, {record['path']}: {problem} [{code}]")
    print(f"{len(records)} images taken in, {len(faulty)} of them cannot be used")


if __name__ == "__main__":
    raise SystemExit(run(main))
