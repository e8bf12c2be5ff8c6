"""Measure what differs between sites before and after harmonisation, on phantoms and on regions.

Inputs: the study's tables, the plan, the resolution records and images of the phantoms, the records of regional means.
Output: site_effect.json. Activity scale is compared with the truth where the table of phantoms tells it; nothing is
corrected.
"""

from pathlib import Path

from evenblur.command import Arguments, run, write_record


def main(arguments: list[str]) -> None:
    """Read the arguments, compare the sites, write the record."""
    parser = Arguments(description=__doc__)
    parser.add_argument("--study-dir", default=Path(), type=Path, help="study folder")
    options = parser.parse_args(arguments)

    from evenblur.site_effect.record import site_effect_record
    from evenblur.study.reading import load_study
    from evenblur.study.records import Layout

    study = load_study(options.study_dir)
    write_record(options.study_dir / Layout(study).site_effect, site_effect_record(options.study_dir, study))


if __name__ == "__main__":
    raise SystemExit(run(main))
