"""What sidecars and DICOM headers state of the reconstruction, and when two images were reconstructed alike."""

import json

import nibabel as nib
import numpy as np
import pytest

import dicom_simulation
from evenblur.images.facts import plain_units, radionuclide, reconstruction_facts, stated_radionuclide, stated_units
from evenblur.images.reading import open_image
from evenblur.plan.reconstruction import compare_reconstruction

SIDECAR = {
    "Units": "Bq/mL",
    "Manufacturer": "Invented works",
    "ManufacturersModelName": "Invented 3",
    "SoftwareVersions": "V 1.2",
    "InstitutionName": "Plantedclinic",
    "TracerRadionuclide": "F18",
    "ReconMethodName": "OSEM",
    "ReconMethodParameterLabels": ["subsets", "Iterations"],
    "ReconMethodParameterUnits": ["none", "none"],
    "ReconMethodParameterValues": [16, 4],
    "ReconFilterType": "Gaussian",
    "ReconFilterSize": 5,
}


def with_sidecar(tmp_path, sidecar):
    path = tmp_path / "a.nii"
    nib.save(nib.Nifti1Image(np.ones((4, 4, 4), np.float32), np.eye(4)), path)
    (tmp_path / "a.json").write_text(sidecar if isinstance(sidecar, str) else json.dumps(sidecar))
    return open_image(path), path


def test_facts_come_from_the_sidecar_without_names_of_devices_or_places(tmp_path):
    facts = reconstruction_facts(*with_sidecar(tmp_path, SIDECAR))
    assert facts["ReconMethodParameters"] == {"iterations": 4.0, "subsets": 16.0}
    assert (facts["ReconFilterType"], facts["ReconFilterSize"]) == ("Gaussian", 5)
    assert facts["ManufacturersModelName"].startswith("sha256:")
    assert not any(word in json.dumps(facts) for word in ("Invented", "Planted", "V 1.2"))


def test_facts_come_from_dicom_headers(tmp_path):
    def versions(header, *_):
        header.SoftwareVersions = ["A", "B"]
        header.NumberOfIterations = 3
        return header

    volume = np.random.default_rng(2).uniform(0, 10, (6, 5, 4))
    dicom_simulation.write_series(tmp_path / "s", volume, change=versions)
    image = open_image(tmp_path / "s")
    facts = reconstruction_facts(image, tmp_path / "s")
    assert facts["ReconMethodName"] == "OSEM 4i8s"
    assert facts["ReconMethodParameters"] == {"iterations": 3.0, "subsets": 8.0}  # the field goes before the name
    assert {"ManufacturersModelName", "SoftwareVersions"} <= set(facts)
    told = reconstruction_facts(
        *with_sidecar(tmp_path, {"SoftwareVersions": "a b", "ManufacturersModelName": "Invented-3"})
    )
    assert all(facts[name] == told[name] for name in ("ManufacturersModelName", "SoftwareVersions"))
    assert stated_radionuclide(image, tmp_path / "s") == "F18"
    assert stated_units(image, tmp_path / "s") == "Bq/mL"


@pytest.mark.parametrize(
    "sidecar", ["", "[1]", "{", '{"ReconMethodName": {"a": 1}}', "[" * 100_000, '{"Units": "%s"}' % ("x" * 99)]
)
def test_a_sidecar_that_says_nothing_gives_no_facts(tmp_path, sidecar):
    image, path = with_sidecar(tmp_path, sidecar)
    assert reconstruction_facts(image, path) == {}
    assert stated_units(image, path) is None


@pytest.mark.parametrize(
    ("change", "apart"),
    [
        ({}, ()),
        ({"ReconMethodName": "osem "}, ()),
        ({"ReconFilterSize": 5.0001}, ()),
        ({"ReconFilterSize": 4}, ("filter size (4 against 5)",)),
        ({"ReconFilterType": "Hann"}, ("filter (Hann against Gaussian)",)),
        ({"ReconMethodName": "FBP"}, ("method (FBP against OSEM)",)),
        (
            {"ReconMethodParameterLabels": ["iterations", "subsets"]},
            ("iterations (16 against 4)", "subsets (4 against 16)"),
        ),
        ({"ManufacturersModelName": "Invented 4"}, ("scanner model",)),
        ({"SoftwareVersions": "V 1.3"}, ("software version",)),
    ],
)
def test_what_differs_is_named_with_both_values(tmp_path, change, apart):
    phantom = reconstruction_facts(*with_sidecar(tmp_path, SIDECAR))
    scan = reconstruction_facts(*with_sidecar(tmp_path, {**SIDECAR, **change}))
    assert compare_reconstruction(scan, phantom).apart == apart


@pytest.mark.parametrize(
    ("left_out", "unstated"),
    [
        ((), ()),
        (("SoftwareVersions",), ()),
        (("ReconMethodName",), ("method",)),
        (("ReconMethodParameterValues",), ("iterations and subsets",)),
        (("ReconFilterSize",), ("filter size",)),
        (("ReconFilterSize", "ReconFilterType"), ("filter",)),
        (("ManufacturersModelName",), ("scanner model",)),
    ],
)
def test_what_one_of_the_two_does_not_state_is_named(tmp_path, left_out, unstated):
    phantom = reconstruction_facts(*with_sidecar(tmp_path, SIDECAR))
    less = {name: value for name, value in SIDECAR.items() if name not in left_out}
    scan = reconstruction_facts(*with_sidecar(tmp_path, less))
    assert compare_reconstruction(scan, phantom).unstated == unstated
    assert compare_reconstruction(phantom, scan).unstated == unstated


def test_back_projection_has_no_iterations_and_no_filter_has_no_size():
    facts = {"ReconMethodName": "filtered back-projection", "ReconFilterType": "none", "ManufacturersModelName": "x"}
    assert compare_reconstruction(facts, dict(facts)).unstated == ()


@pytest.mark.parametrize("text", [None, "", "a name", "18", "F", "X18", "F18; a name", "F-18 Smith", "1234F", 18])
def test_text_that_is_no_radionuclide_is_none(text):
    assert radionuclide(text) is None


def test_units_are_told_apart_by_meaning_not_by_spelling():
    assert plain_units("Bq/mL") == plain_units("BQML") == plain_units("bq/ml ")
    assert len({plain_units(unit) for unit in ("Bq/mL", "kBq/mL", "g/mL", "SUV", "counts", "counts/s")}) == 6
