"""Count what an image's headers say about the patient: how many fields are filled, never what they hold.

An image that is pooled should hold none of them. They are never copied; that they are there is a thing to tell.
"""

from collections.abc import Mapping
from pathlib import Path
from typing import Any

from evenblur.images.nibabel_alone import nib
from evenblur.images.sidecars import read_sidecar

NAMING_FIELDS = ("PatientName", "PatientID")
"""Filled with a code by who takes identities out, and then no sign of a person (DICOM PS3.15, annex E)."""

PATIENT_FIELDS = (
    *NAMING_FIELDS,
    "IssuerOfPatientID",
    "OtherPatientIDs",
    "OtherPatientIDsSequence",
    "OtherPatientNames",
    "PatientBirthDate",
    "PatientBirthTime",
    "PatientBirthName",
    "PatientMotherBirthName",
    "PatientAddress",
    "PatientTelephoneNumbers",
    "CountryOfResidence",
    "RegionOfResidence",
    "EthnicGroup",
    "Occupation",
    "MilitaryRank",
    "BranchOfService",
    "PatientReligiousPreference",
    "MedicalRecordLocator",
    "AdditionalPatientHistory",
    "PatientComments",
    "ResponsiblePerson",
)
"""DICOM's fields that tell who a patient is. Sex, age, size and weight are not counted: uptake values need them."""

IDENTITY_REMOVED = "PatientIdentityRemoved"
"""DICOM's field in which a site says that it took identities out."""

_ECAT_FIELDS = ("patient_name", "patient_id", "patient_birth_date")


def filled_fields(header: Any) -> frozenset[str]:
    """Names of the fields about the patient that a DICOM header (pydicom's `Dataset`) fills.

    >>> from pydicom.dataset import Dataset
    >>> header = Dataset()
    >>> header.PatientName, header.PatientBirthDate, header.PatientComments = "Invented^Name", "19010203", ""
    >>> sorted(filled_fields(header))
    ['PatientBirthDate', 'PatientName']
    >>> header.PatientIdentityRemoved = "YES"
    >>> sorted(filled_fields(header))
    ['PatientBirthDate']
    """
    values = {field: header.get(field) for field in (*PATIENT_FIELDS, IDENTITY_REMOVED)}
    return _filled(values)


def count_patient_fields(source: Any, image: Path) -> int:
    """How many fields about the patient an image and its sidecar fill.

    Parameters
    ----------
    source
        The DICOM series or the nibabel image.
    image
        The image's path; the sidecar lies beside it.
    """
    return len(_in_headers(source) | _filled(read_sidecar(image)))


def _in_headers(source: Any) -> frozenset[str]:
    if isinstance(source, nib.ecat.EcatImage):
        names = [name for name in _ECAT_FIELDS if name in source.header.structarr.dtype.names]
        return frozenset(name for name in names if _says(source.header.structarr[name].item()))
    if isinstance(source, nib.parrec.PARRECImage):
        return frozenset({"patient_name"} if _says(source.header.general_info.get("patient_name")) else ())
    return frozenset(getattr(source, "patient_fields", ()))


def _filled(values: Mapping[str, Any]) -> frozenset[str]:
    removed = str(values.get(IDENTITY_REMOVED) or "").strip().upper() == "YES"
    left_out = NAMING_FIELDS if removed else ()
    return frozenset(field for field in PATIENT_FIELDS if field not in left_out and _says(values.get(field)))


def _says(value: Any) -> bool:
    if isinstance(value, bytes):
        return bool(value.strip(b"\0 "))
    return bool(value) and bool(str(value).strip())
