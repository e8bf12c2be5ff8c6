"""Write the audit's tables from the records of a run.

Inputs: the study folder with its settings, tables and records. Outputs: sites.tsv, scans.tsv, queries.tsv and
covariates.tsv under the audit folder of the results.
"""

from pathlib import Path

from evenblur.command import Arguments, run, write_text


def main(arguments: list[str]) -> None:
    """Read the arguments, gather the records, write the three tables."""
    parser = Arguments(description=__doc__)
    parser.add_argument("--study-dir", type=Path, default=Path(), help="the study folder (default: here)")
    options = parser.parse_args(arguments)

    from evenblur.audit.covariates import COVARIATES_COLUMNS, covariates_rows
    from evenblur.audit.inputs import audit_of_study
    from evenblur.audit.queries import QUERIES_COLUMNS, queries_rows
    from evenblur.audit.tables import SCANS_COLUMNS, SITES_COLUMNS, scans_rows, sites_rows, table_text

    audit = audit_of_study(options.study_dir)
    folder = options.study_dir / audit.settings["results"] / "audit"
    write_text(folder / "sites.tsv", table_text(SITES_COLUMNS, sites_rows(audit)))
    write_text(folder / "scans.tsv", table_text(SCANS_COLUMNS, scans_rows(audit)))
    write_text(folder / "queries.tsv", table_text(QUERIES_COLUMNS, queries_rows(audit)))
    write_text(folder / "covariates.tsv", table_text(COVARIATES_COLUMNS, covariates_rows(audit)))


if __name__ == "__main__":
    raise SystemExit(run(main))
