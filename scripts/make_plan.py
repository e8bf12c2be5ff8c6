"""Make the plan: which phantom session speaks for which scan, the target, every period's kernel.

Inputs: the study's settings and tables, the intake and resolution records. Output: plan.json.
"""

import argparse
from pathlib import Path

from evenblur.command import run, write_record


def main(arguments: list[str]) -> None:
    """Read the arguments, make the plan, write it."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--study-dir", default=Path(), type=Path, help="study folder")
    options = parser.parse_args(arguments)

    from evenblur.plan.planning import make_plan
    from evenblur.study.reading import load_study
    from evenblur.study.records import Layout, read_plan_inputs

    study = load_study(options.study_dir)
    plan = make_plan(study, **read_plan_inputs(options.study_dir, study))
    write_record(options.study_dir / Layout(study).plan, plan)


if __name__ == "__main__":
    raise SystemExit(run(main))
