"""The report's section about the sites, and the covariates."""

import math
from pathlib import Path

import pytest

from audit_example import TARGET_MM, example_audit
from evenblur.audit.covariates import COVARIATES_COLUMNS, covariates_rows
from evenblur.audit.facts import audit_record
from evenblur.audit.report import render_report
from evenblur.audit.site_effect_view import site_effect_view
from evenblur.site_effect.record import compare_regions

TEMPLATES = Path(__file__).resolve().parents[2] / "workflow" / "report"


def change(before, after):
    return {"before": before, "after": after, "change": after / before - 1}


def record():
    cylinder = {
        "kind": "uniform_cylinder",
        "object": "filled cylinder, radius 98 mm, length 111 mm",
        "phantoms": ["phA", "phB"],
        "sites": 2,
        "periods": 2,
        "points": 1000,
        "between_sites": change(0.08, 0.05),
        "between_periods": change(0.09, 0.05),
        "by_depth": [],
        "profile": None,
        "left_out": [{"phantom": "phC", "why": "its <ends> do not both lie inside the field"}],
        "why": None,
    }
    point = {**cylinder, "kind": "point_source", "why": "only one site scanned this object"}
    values = [("s1", "quay", 1.0, 1.0), ("s2", "quay", 1.2, 1.1), ("s3", "mill", 1.6, 1.2), ("s4", "mill", 1.5, 1.1)]
    scale = {
        "phantom": "phA",
        "period": "A.s1",
        "measured_kbq_ml": 12.0,
        "true_kbq_ml": 10.0,
        "ratio": 1.2,
        "why": None,
    }
    unknown = {**scale, "phantom": "phB", "ratio": None, "why": "neither header nor sidecar tells the image's unit"}
    return {
        "phantoms": [point, cylinder],
        "regions": compare_regions({"cortex": values}, set()),
        "regions_left_out": [{"entities": "e", "region": "cortex", "why": "x"}],
        "scale": [scale, unknown],
    }


def page_of(audit):
    return render_report(audit_record(audit), audit=audit, templates=TEMPLATES)


def test_the_section_says_how_much_less_the_sites_differ():
    page = page_of(example_audit(site_effect=record()))
    assert "the coefficient of variation between sites falls by 38 %, from 8.0 % to 5.0 %." in page
    assert "Not compared: only one site scanned this object." in page
    assert page.index("falls by 38 %") < page.index("Not compared: only one site")
    assert "its &lt;ends&gt; do not" in page
    assert "nothing was corrected" in page
    assert ">1.200<" in page
    assert "Not computed: neither header nor sidecar" in page
    assert "doses and scales of the sites are in them" in page
    assert "1 regions of single scans" not in page


def test_a_run_without_the_record_has_no_section():
    assert site_effect_view(example_audit()) is None
    assert 'id="effect"' not in page_of(example_audit())


def test_charts_of_the_plan_are_told_in_words():
    points = [
        {"phantom_session": "s1", "fwhm_mm": 5.0, "low_mm": None, "beyond": False, "why": "the first session"},
        {"phantom_session": "s2", "fwhm_mm": 6.5, "low_mm": 4.1, "beyond": True, "why": ""},
    ]
    audit = example_audit(site_effect=record())
    plan = {**audit.plan, "drift": [{"setup": "A", "direction": "in_plane", "points": points}]}
    view = site_effect_view(example_audit(site_effect=record(), plan=plan))
    assert view["drift"] == ["A, in-plane: 5.00, 6.50 mm; beyond the control limits: s2."]


def test_covariates_carry_site_kernel_and_errors():
    audit = example_audit()
    rows = covariates_rows(audit)
    assert len(rows) == sum(scan["status"] == "accepted" for scan in audit.plan["scans"])
    assert all(list(row) != [] and set(row) == set(COVARIATES_COLUMNS) for row in rows)
    first = rows[0]
    assert (first["site"], first["verdict"]) == ("siteA", "pass")
    assert float(first["kernel_in_plane_mm"]) == pytest.approx(math.sqrt(TARGET_MM**2 - 5.2**2), abs=1e-4)
