"""How long the audit's data and pages of many scans take, and how large they are. Prints a table."""

import argparse
import json
import sys
import time
from pathlib import Path

TESTS = Path(__file__).resolve().parents[1]
sys.path[:0] = [str(TESTS), str(TESTS.parent / "scripts")]

from evenblur.audit.facts import audit_record  # noqa: E402 - the path comes first
from evenblur.audit.report import render_report  # noqa: E402
from evenblur.audit.site_pages import render_sites  # noqa: E402
from evenblur.audit.site_records import site_records  # noqa: E402
from many_scans_example import TEMPLATES, many_scans  # noqa: E402


def main() -> None:
    """Build the data and the pages of an invented study, and print times and sizes."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--scans", type=int, default=1000)
    parser.add_argument("--setups", type=int, default=60)
    options = parser.parse_args()
    audit, pictures = many_scans(scans=options.scans, setups=options.setups)
    start = time.perf_counter()
    record = audit_record(audit)
    print(f"data     {time.perf_counter() - start:6.1f} s {_megabytes(json.dumps(record.model_dump(mode='json')))}")
    start = time.perf_counter()
    page = render_report(record, audit=audit, templates=TEMPLATES, pictures=pictures)
    print(f"report   {time.perf_counter() - start:6.1f} s {_megabytes(page)}")
    start = time.perf_counter()
    sites = render_sites(site_records(record, audit), audit=audit, templates=TEMPLATES, pictures=pictures)
    print(f"{len(sites):3d} sites {time.perf_counter() - start:6.1f} s {_megabytes(''.join(sites.values()))}")


def _megabytes(text: str) -> str:
    return f"{len(text.encode()) / 1e6:7.2f} MB"


if __name__ == "__main__":
    main()
