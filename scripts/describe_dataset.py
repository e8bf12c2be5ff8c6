"""Describe the harmonised data set as BIDS asks of a derivative.

Inputs: the study's settings. Outputs: dataset_description.json, and .bidsignore where the standard lacks the modality.
"""

from pathlib import Path

from evenblur.command import Arguments, run, write_record, write_text


def main(arguments: list[str]) -> None:
    """Read the arguments, write the description."""
    parser = Arguments(description=__doc__)
    parser.add_argument("--study-dir", default=Path(), type=Path, help="study folder")
    options = parser.parse_args(arguments)

    from evenblur.study.dataset import bidsignore, describe_dataset
    from evenblur.study.reading import load_study
    from evenblur.study.records import Layout

    study = load_study(options.study_dir)
    folder = options.study_dir / Layout(study).harmonised
    write_record(folder / "dataset_description.json", describe_dataset(study.settings))
    ignored = bidsignore(study.settings)
    if ignored:
        write_text(folder / ".bidsignore", ignored)


if __name__ == "__main__":
    raise SystemExit(run(main))
