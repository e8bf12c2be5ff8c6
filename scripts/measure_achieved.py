"""Measure a period's achieved width: its phantoms, smoothed by its own kernel, measured again.

Inputs: the study's tables, the plan, the period's phantom images. Output: the achieved record (JSON).
"""

from pathlib import Path

from evenblur.command import Arguments, run, write_record


def main(arguments: list[str]) -> None:
    """Read the arguments, smooth and measure the period's phantoms, write the record."""
    parser = Arguments(description=__doc__)
    parser.add_argument("--study-dir", default=Path(), type=Path, help="study folder")
    parser.add_argument("--setup", required=True, help="label of the setup")
    parser.add_argument("--phantom-session", required=True, help="label of the phantom session")
    options = parser.parse_args(arguments)

    from evenblur.achieving import achieved_width
    from evenblur.study.proving import proving_inputs
    from evenblur.study.reading import load_study
    from evenblur.study.records import Layout

    study = load_study(options.study_dir)
    inputs = proving_inputs(options.study_dir, study, setup=options.setup, phantom_session=options.phantom_session)
    record = achieved_width(setup=options.setup, phantom_session=options.phantom_session, **inputs)
    write_record(options.study_dir / Layout(study).achieved(options.setup, options.phantom_session), record)


if __name__ == "__main__":
    raise SystemExit(run(main))
