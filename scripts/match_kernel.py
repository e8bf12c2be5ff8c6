"""Match a period's kernel to its own phantoms (only where a study says `kernel: matched`).

Inputs: the study's tables, the draft plan, the period's phantom images. Output: the matching record (JSON).
"""

from pathlib import Path

from evenblur.command import Arguments, run, write_record


def main(arguments: list[str]) -> None:
    """Read the arguments, match the period's kernel, write the record."""
    parser = Arguments(description=__doc__)
    parser.add_argument("--study-dir", default=Path(), type=Path, help="study folder")
    parser.add_argument("--setup", required=True, help="label of the setup")
    parser.add_argument("--phantom-session", required=True, help="label of the phantom session")
    options = parser.parse_args(arguments)

    from evenblur.matching import match_kernel
    from evenblur.study.proving import matching_inputs
    from evenblur.study.reading import load_study
    from evenblur.study.records import Layout

    study = load_study(options.study_dir)
    inputs = matching_inputs(options.study_dir, study, setup=options.setup, phantom_session=options.phantom_session)
    record = match_kernel(setup=options.setup, phantom_session=options.phantom_session, **inputs)
    write_record(options.study_dir / Layout(study).matching(options.setup, options.phantom_session), record)


if __name__ == "__main__":
    raise SystemExit(run(main))
