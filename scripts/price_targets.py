"""Say what each target would cost, before anything is smoothed.

Inputs: the study's settings and tables, the plan and the records that it was made from. Outputs: plan.tsv and
plan.html beside plan.json; with --show nothing but lines on the terminal, for whoever decides on the target.
"""

from pathlib import Path

from evenblur.command import Arguments, read_record, run, write_text

TEMPLATES = Path(__file__).resolve().parent.parent / "workflow" / "report"


def main(arguments: list[str]) -> None:
    """Read the arguments, price the targets, write table and page or show the lines."""
    parser = Arguments(description=__doc__)
    parser.add_argument("--study-dir", default=Path(), type=Path, help="study folder")
    parser.add_argument("--show", action="store_true", help="print the prices and the block that freezes the target")
    options = parser.parse_args(arguments)

    from evenblur.plan.price_page import decision_lines, price_table, render_prices
    from evenblur.plan.prices import price_targets
    from evenblur.study.reading import load_study
    from evenblur.study.records import Layout, read_plan_inputs

    study = load_study(options.study_dir)
    layout = Layout(study)
    plan = read_record(options.study_dir / layout.plan)
    prices = price_targets(study, plan=plan, **read_plan_inputs(options.study_dir, study))
    if options.show:
        print("\n".join(decision_lines(study, plan, prices)))
        return
    write_text(options.study_dir / layout.prices("tsv"), price_table(prices))
    write_text(options.study_dir / layout.prices("html"), render_prices(study, plan, prices, templates=TEMPLATES))


if __name__ == "__main__":
    raise SystemExit(run(main))
