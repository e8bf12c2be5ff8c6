"""Write the audit's pages: the report, and each site's own record.

Inputs: the study folder with its settings, tables and records, audit.json and, where there is one, pictures.json.
Outputs under the audit folder of the results: report.html; sites/SITE.html and sites/SITE.json.
"""

from pathlib import Path

from evenblur.command import Arguments, read_record, run, write_record, write_text

TEMPLATES = Path(__file__).resolve().parent.parent / "workflow" / "report"


def main(arguments: list[str]) -> None:
    """Read the arguments, gather data and records, write the pages."""
    parser = Arguments(description=__doc__)
    parser.add_argument("--study-dir", type=Path, default=Path(), help="the study folder (default: here)")
    options = parser.parse_args(arguments)

    from evenblur.audit.inputs import audit_of_study
    from evenblur.audit.report import render_report
    from evenblur.audit.site_pages import render_sites
    from evenblur.audit.site_records import read_audit, remove_others, site_records

    audit = audit_of_study(options.study_dir)
    folder = options.study_dir / audit.settings["results"] / "audit"
    record, sites = read_audit(folder / "audit.json"), folder / "sites"
    drawn = folder / "pictures.json"
    pictures = read_record(drawn) if drawn.is_file() else {}
    write_text(folder / "report.html", render_report(record, audit=audit, templates=TEMPLATES, pictures=pictures))
    records = site_records(record, audit)
    for site, page in render_sites(records, audit=audit, templates=TEMPLATES, pictures=pictures).items():
        write_text(sites / f"{site}.html", page)
        write_record(sites / f"{site}.json", records[site].model_dump(mode="json"))
    remove_others(sites, set(records))


if __name__ == "__main__":
    raise SystemExit(run(main))
