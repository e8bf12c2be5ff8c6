"""The audit's pages of an invented study in a Chromium without a window: for the tests of the pages."""

import base64
import importlib.util
import json
import shutil
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
from selenium import webdriver
from selenium.webdriver.chrome.options import Options
from selenium.webdriver.chrome.service import Service

from audit_example import example_audit
from conftest import chromium_path
from evenblur.audit.facts import audit_record
from evenblur.audit.inputs import AuditInput
from evenblur.audit.report import render_report
from evenblur.audit.site_pages import render_sites
from evenblur.audit.site_records import site_records
from evenblur.phantoms.pictures import slice_record, slice_through
from evenblur.picture_pairs import pair_record

TEMPLATES = Path(__file__).resolve().parents[1] / "workflow" / "report"

FLAGS = (
    "--headless",
    "--no-sandbox",
    "--disable-gpu",
    "--disable-quic",
    "--no-first-run",
    "--disable-background-networking",
    "--disable-component-update",
    "--disable-sync",
    "--force-color-profile=srgb",
)


def start_browser(profile: Path, *, dark: bool = False) -> webdriver.Chrome:
    """A Chromium that logs its console and every request."""
    options = Options()
    options.binary_location = str(chromium_path())
    for flag in (*FLAGS, f"--user-data-dir={profile}", *(["--blink-settings=preferredColorScheme=0"] if dark else [])):
        options.add_argument(flag)
    options.set_capability("goog:loggingPrefs", {"browser": "ALL", "performance": "ALL"})
    return webdriver.Chrome(options=options, service=Service(shutil.which("chromedriver")))


def requests_of(browser: webdriver.Chrome) -> list[str]:
    """Addresses that the browser asked for since the last look."""
    events = [json.loads(entry["message"])["message"] for entry in browser.get_log("performance")]
    return [one["params"]["request"]["url"] for one in events if one["method"] == "Network.requestWillBeSent"]


def axe_source() -> str:
    """The accessibility checker that runs in the page (axe-core), from its package."""
    found = importlib.util.find_spec("axe_core_python")
    if found is None or found.origin is None:
        raise ModuleNotFoundError("axe-core-python is missing: install envs/develop.txt")
    return (Path(found.origin).parent / "axe.min.js").read_text(encoding="utf-8")


def print_pages(browser: webdriver.Chrome, path: Path) -> bytes:
    """A page as it prints on A4, as a PDF file's bytes."""
    browser.get(path.as_uri())
    sheet = {"paperWidth": 8.27, "paperHeight": 11.69, "printBackground": True, "preferCSSPageSize": False}
    return base64.b64decode(browser.execute_cdp_cmd("Page.printToPDF", sheet)["data"])


def full_audit() -> AuditInput:
    """The example with pictures, a not-clean data set, an excluded row and unknown codes: every part of the page."""
    audit = example_audit()
    rows = np.add.outer(np.arange(30.0), np.arange(40.0))
    pair = pair_record(rows, rows / 2, pixel_mm=(2.0, 2.0), label="Axial slice 3 of 5")
    volume = np.random.default_rng(1).uniform(0.0, 50.0, (20, 14, 5))
    plane = slice_through(
        volume.shape, plane="axial", voxel_mm=(2, 3, 4), middle=(9, 7, 2), low=(0, 0, 0), high=(19, 13, 4)
    )
    slices = [slice_record(volume, plane=plane, fitted=volume[tuple(plane.voxels.T)] - 2.0)]
    achieved = {key: {**record, "pictures": {f"ph{key[0]}": pair}} for key, record in audit.achieved.items()}
    resolution = {label: {**record, "fit": {"slices": slices}} for label, record in audit.resolution.items()}
    scan_records: dict[str, Any] = {
        name: {**record, "Evenblur": {**record["Evenblur"], "noise_variance_factor": 0.05}}
        for name, record in audit.scan_records.items()
    }
    stray = "results/harmonised/sub-zz/left_over.nii.gz"
    return replace(
        audit,
        achieved=achieved,
        resolution=resolution,
        scan_records=scan_records,
        harmonised_files=(*audit.harmonised_files, stray),
    )


def write_pages(folder: Path) -> Path:
    """Report and site records of the full example; returns the report's path."""
    audit = full_audit()
    record = audit_record(audit, history={"lines": 3, "sha256": "ab" * 32})
    rows = np.add.outer(np.arange(30.0), np.arange(40.0))
    pair = pair_record(rows, rows / 2, pixel_mm=(2.0, 2.0), label="Axial slice 3 of 5")
    pictures = {scan.entities: pair for scan in record.scans if scan.status == "accepted"}
    (folder / "sites").mkdir(parents=True)
    report = folder / "report.html"
    report.write_text(
        render_report(record, audit=audit, templates=TEMPLATES, pictures=pictures), encoding="utf-8", newline="\n"
    )
    records = site_records(record, audit)
    for site, page in render_sites(records, audit=audit, templates=TEMPLATES, pictures=pictures).items():
        (folder / "sites" / f"{site}.html").write_text(page, encoding="utf-8", newline="\n")
    return report
