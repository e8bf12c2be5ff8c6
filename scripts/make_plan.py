"""Make the plan: which phantom session speaks for which scan, the target, every period's kernel.

Inputs: the study's settings and tables, the intake and resolution records, the matching records where the study says
`kernel: matched`. Output: plan.json, or with --draft the plan by quadrature that matching starts from.
"""

from pathlib import Path

from evenblur.command import Arguments, run, write_record


def main(arguments: list[str]) -> None:
    """Read the arguments, make the plan, write it."""
    parser = Arguments(description=__doc__)
    parser.add_argument("--study-dir", default=Path(), type=Path, help="study folder")
    parser.add_argument("--draft", action="store_true", help="by quadrature, before kernels are matched")
    options = parser.parse_args(arguments)

    from evenblur.plan.planning import make_plan
    from evenblur.study.reading import load_study
    from evenblur.study.records import Layout, read_matching, read_plan_inputs

    study = load_study(options.study_dir)
    inputs = read_plan_inputs(options.study_dir, study)
    matched = study.settings.kernel == "matched" and not options.draft
    matching = read_matching(options.study_dir, study) if matched else {}
    name = Layout(study).draft_plan if options.draft else Layout(study).plan
    write_record(options.study_dir / name, make_plan(study, matching=matching, **inputs))


if __name__ == "__main__":
    raise SystemExit(run(main))
