"""The harmonised images as a BIDS derivative data set (BIDS 1.11, section on derivatives)."""

from typing import Any

import evenblur
from evenblur.study.settings import Settings

BIDS_VERSION = "1.11.1"


def describe_dataset(settings: Settings) -> dict[str, Any]:
    """The content of dataset_description.json of the harmonised data set."""
    # A relative address: the study folder, which holds the scans as the sites sent them.
    raw = "/".join([".."] * (len(settings.results.split("/")) + 1))
    return {
        "Name": f"{settings.study.title}: harmonised to one resolution",
        "BIDSVersion": BIDS_VERSION,
        "DatasetType": "derivative",
        "GeneratedBy": [
            {
                "Name": "evenblur",
                "Version": evenblur.__version__,
                "Description": "Gaussian smoothing of every scan to the study's common width",
            }
        ],
        "SourceDatasets": [{"URL": raw}],
        "DatasetLinks": {"raw": raw},
    }


def bidsignore(settings: Settings) -> str:
    """Names that a BIDS validator is to pass over; nothing for PET, which the standard covers."""
    return "spect\n**/spect/**\n" if settings.modality == "spect" else ""


def dataset_file_names(settings: Settings) -> list[str]:
    """Files that describe the data set, relative to its folder."""
    return ["dataset_description.json", *([".bidsignore"] if bidsignore(settings) else [])]
