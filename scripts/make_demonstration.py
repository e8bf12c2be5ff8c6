"""Make the images of the demonstration study.

Inputs: none; everything is invented by `evenblur.demonstration`.
Outputs: `results/demonstration/phantoms/*.nii.gz` and `results/demonstration/scans/*.nii.gz` in the study folder.
"""

from pathlib import Path

from evenblur import command


def main(arguments: list[str]) -> None:
    """Read the arguments, make the images, say how many."""
    parser = command.Arguments(description="Make the images of the demonstration study (all invented).")
    parser.add_argument("--study-dir", type=Path, default=Path(), help="the study folder (default: here)")
    study_dir = parser.parse_args(arguments).study_dir
    # After the command line is read, so that --help is quick and numpy sees the thread settings of `command`.
    from evenblur.demonstration.make import make_demonstration

    print(f"{len(make_demonstration(study_dir))} images of the invented study are made")


if __name__ == "__main__":
    raise SystemExit(command.run(main))
