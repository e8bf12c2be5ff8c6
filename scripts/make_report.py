"""Write the audit's report from the records of a run: one self-contained page.

Inputs: the study folder with its settings, tables and records. Output: report.html under the audit folder of the
results.
"""

from pathlib import Path

from evenblur.command import Arguments, run, write_text

TEMPLATES = Path(__file__).resolve().parent.parent / "workflow" / "report"


def main(arguments: list[str]) -> None:
    """Read the arguments, gather the records, write the page."""
    parser = Arguments(description=__doc__)
    parser.add_argument("--study-dir", type=Path, default=Path(), help="the study folder (default: here)")
    options = parser.parse_args(arguments)

    from evenblur.audit.inputs import audit_of_study
    from evenblur.audit.report import render_report

    audit = audit_of_study(options.study_dir)
    page = render_report(audit, templates=TEMPLATES)
    write_text(options.study_dir / audit.settings["results"] / "audit" / "report.html", page)


if __name__ == "__main__":
    raise SystemExit(run(main))
