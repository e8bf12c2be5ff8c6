"""Schemas and key tables say what the models say."""

from pathlib import Path

import yaml

from evenblur.study.documents import fill_in, schema_files
from evenblur.study.settings import Settings

PROGRAM = Path(__file__).resolve().parents[2]


def test_schemas_are_written_from_the_models():
    for name, text in schema_files().items():
        stored = (PROGRAM / "workflow" / "schemas" / name).read_text(encoding="utf-8")
        assert stored == text, f"{name} is out of date: run python scripts/write_documents.py"


def test_the_page_of_keys_is_written_from_the_models():
    page = (PROGRAM / "config" / "README.md").read_text(encoding="utf-8")
    assert fill_in(page) == page, "config/README.md is out of date: run python scripts/write_documents.py"
    for name in ("valid_days", "declared_source", "coarser_than_target", "radionuclide"):
        assert f"{name}`" in page


def test_the_demonstrations_settings_show_every_key():
    shown = yaml.safe_load((PROGRAM / "config" / "study.yaml").read_text(encoding="utf-8"))
    assert set(shown) == set(Settings.model_fields)
    for block in ("target", "phantoms", "tolerance", "tables", "handover"):
        model = Settings.model_fields[block].annotation
        assert set(shown[block]) == set(model.model_fields), block


def test_defaults_are_the_agreed_ones():
    settings = Settings.model_validate({"study": {"title": "x"}})
    assert settings.model_dump(exclude={"study"}) == {
        "modality": "pet",
        "demo": False,
        "tables": {
            "setups": "config/setups.tsv",
            "phantoms": "config/phantoms.tsv",
            "scans": "config/scans.tsv",
            "regions": "config/regions.tsv",
        },
        "results": "results",
        "target": {
            "choose": "coarsest",
            "in_plane_mm": None,
            "axial_mm": None,
            "isotropic": True,
            "allowance_se": 2.0,
            "round_up_to_mm": 0.1,
            "declared_counts": False,
            "approval": {"by": None, "on": None, "reason": None},
        },
        "kernel": "quadrature",
        "phantoms": {
            "choose": "latest_before",
            "valid_days": 365,
            "repeatability_mm": 0.2,
            "prefer": ["reference_image", "uniform_cylinder", "hot_spheres", "line_source", "point_source"],
        },
        "tolerance": {"achieved_mm": 0.3, "no_kernel_below_mm": 0.5},
        "coarser_than_target": "hold",
        "reconstruction_mismatch": "hold",
        "handover": {"include_images": False},
    }
