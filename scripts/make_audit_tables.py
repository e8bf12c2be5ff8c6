"""Write the audit's data and tables from the records of a run.

Inputs: the study folder with its settings, tables and records. Outputs under the audit folder of the results:
audit.json; sites.tsv, scans.tsv, queries.tsv and covariates.tsv; sites.csv and scans.csv for spreadsheets.
"""

from pathlib import Path

from evenblur.command import Arguments, run, write_record, write_text


def main(arguments: list[str]) -> None:
    """Read the arguments, gather the records, write data and tables."""
    parser = Arguments(description=__doc__)
    parser.add_argument("--study-dir", type=Path, default=Path(), help="the study folder (default: here)")
    options = parser.parse_args(arguments)

    from evenblur.audit.covariates import COVARIATES_COLUMNS, covariates_rows
    from evenblur.audit.facts import audit_record, history_head
    from evenblur.audit.inputs import audit_of_study
    from evenblur.audit.queries import QUERIES_COLUMNS, queries_rows
    from evenblur.audit.spreadsheet import spreadsheet_text
    from evenblur.audit.tables import SCANS_COLUMNS, SITES_COLUMNS, scans_rows, sites_rows, table_text

    audit = audit_of_study(options.study_dir)
    results = options.study_dir / audit.settings["results"]
    folder = results / "audit"
    record = audit_record(audit, history=history_head(results))
    write_record(folder / "audit.json", record.model_dump(mode="json"))
    sites, scans = sites_rows(audit), scans_rows(audit)
    write_text(folder / "sites.tsv", table_text(SITES_COLUMNS, sites))
    write_text(folder / "scans.tsv", table_text(SCANS_COLUMNS, scans))
    write_text(folder / "queries.tsv", table_text(QUERIES_COLUMNS, queries_rows(audit)))
    write_text(folder / "sites.csv", spreadsheet_text(SITES_COLUMNS, sites))
    write_text(folder / "scans.csv", spreadsheet_text(SCANS_COLUMNS, scans))
    write_text(folder / "covariates.tsv", table_text(COVARIATES_COLUMNS, covariates_rows(audit)))


if __name__ == "__main__":
    raise SystemExit(run(main))
