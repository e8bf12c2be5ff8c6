"""Measured over true activity: decay against published factors, units, times, and what cannot be computed."""

import datetime

import pytest

from evenblur.site_effect.scale import HALF_LIFE_S, decayed, radionuclide_key, scale_entry
from evenblur.study.rows import check_details

DAY = datetime.date(2026, 3, 31)
DETAILS = {"true_kbq_ml": 20.0, "reference_time": "2026-03-31T10:00:00", "image_time": "2026-03-31T11:00:00"}


def entry(details=DETAILS, **changes):
    told = {"radionuclide": "F-18", "inside": 13692.66, "units": "Bq/mL", "sidecar": {}, **changes}
    return scale_entry(phantom="p", period="a.p1", details=details, acquired=DAY, **told)


# Factors after one hour from the half-lives of ICRP Publication 107, computed apart from this program.
@pytest.mark.parametrize(
    ("nuclide", "factor"), [("F18", 0.684633), ("C11", 0.130072), ("Ga68", 0.541063), ("Tc99m", 0.891155)]
)
def test_an_hour_of_decay(nuclide, factor):
    assert decayed(1.0, seconds=3600.0, half_life_s=HALF_LIFE_S[nuclide]) == pytest.approx(factor, abs=1e-6)


def test_the_truth_is_decayed_to_the_time_of_the_image():
    found = entry()
    assert found["why"] is None
    assert found["true_kbq_ml"] == pytest.approx(20 * 0.684633, abs=1e-4)
    assert found["ratio"] == pytest.approx(1.0, abs=1e-4)


def test_a_reference_time_after_the_image_goes_back():
    found = entry({**DETAILS, "reference_time": "2026-03-31T12:00:00"})
    assert found["true_kbq_ml"] == pytest.approx(20 / 0.684633, abs=1e-3)


def test_the_sidecar_tells_the_time_where_the_details_do_not():
    details = {name: value for name, value in DETAILS.items() if name != "image_time"}
    sidecar = {"TimeZero": "10:50:00", "ImageDecayCorrected": True, "ImageDecayCorrectionTime": 600}
    assert entry(details, sidecar=sidecar)["ratio"] == pytest.approx(1.0, abs=1e-4)
    for wrong in ({}, {**sidecar, "ImageDecayCorrected": False}, {**sidecar, "ImageDecayCorrectionTime": "600"}):
        assert "image_time" in entry(details, sidecar=wrong)["why"]
    assert "no time of day" in entry(details, sidecar={**sidecar, "TimeZero": "ten"})["why"]


@pytest.mark.parametrize(("unit", "factor"), [("Bq/mL", 1.0), ("BQML", 1.0), ("kBq/ml", 1e-3), ("MBq/mL", 1e-6)])
def test_units_of_activity_concentration_are_brought_together(unit, factor):
    assert entry(units=unit, inside=13692.66 * factor)["ratio"] == pytest.approx(1.0, abs=1e-4)


@pytest.mark.parametrize(
    ("changes", "why"),
    [
        ({"units": None}, "tells the image's unit"),
        ({"units": "CNTS"}, "the image's unit is CNTS"),
        ({"radionuclide": None}, "names no radionuclide"),
        ({"radionuclide": "U-235"}, "no half-life"),
        ({"inside": None}, "no level"),
        ({"details": {"true_kbq_ml": 20.0}}, "reference_time"),
    ],
)
def test_what_cannot_be_computed_says_why(changes, why):
    found = entry(**changes)
    assert found["ratio"] is None
    assert why in found["why"]


@pytest.mark.parametrize("name", ["F18", "F-18", "18F", "f-18", "[18F]"])
def test_radionuclides_are_known_as_people_write_them(name):
    assert radionuclide_key(name) == "F18"


def test_details_of_the_scale_are_checked():
    checked = check_details("uniform_cylinder", {**DETAILS, "image_unit": "Bq/mL"})
    assert checked["reference_time"] == "2026-03-31T10:00:00"
    for wrong in ({"reference_time": "noon"}, {"true_kbq_ml": 0}, {"image_unit": "CNTS"}):
        with pytest.raises(ValueError, match="details"):
            check_details("uniform_cylinder", {**DETAILS, **wrong})
    with pytest.raises(ValueError, match="no key"):
        check_details("point_source", {"true_kbq_ml": 20.0})
