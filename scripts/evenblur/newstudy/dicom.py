"""Look through a folder of DICOM files for PET and SPECT series.

Only the fields named here are read. Those of `_IN_MEMORY` tell which files and series belong together and whether a
series is a phantom's; they, and every name of a file, stay in memory: subjects get new labels in the tables.
"""

import os
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import pydicom
from pydicom.dataset import Dataset
from pydicom.errors import InvalidDicomError
from pydicom.filereader import read_file_meta_info
from pydicom.uid import DeflatedExplicitVRLittleEndian

from evenblur.errors import InputError
from evenblur.images.dicom import silence
from evenblur.newstudy.found import FoundImage, Look, clean, comparable, day_of

_COPIED = (
    "Modality",
    "AcquisitionDate",
    "AcquisitionDateTime",
    "ManufacturerModelName",
    "ReconstructionMethod",
    "ConvolutionKernel",
    "RadiopharmaceuticalInformationSequence",
)
_IN_MEMORY = (
    "SOPClassUID",
    "ImageType",
    "CorrectedImage",
    "StudyInstanceUID",
    "SeriesInstanceUID",
    "PatientID",
    "PatientName",
    "StudyDescription",
    "SeriesDescription",
    "QualityControlImage",
    "InstitutionName",
)
_MODALITIES = {
    "1.2.840.10008.5.1.4.1.1.128": "pet",
    "1.2.840.10008.5.1.4.1.1.128.1": "pet",
    "1.2.840.10008.5.1.4.1.1.130": "pet",
    "1.2.840.10008.5.1.4.1.1.20": "spect",
}
"""Storage classes of images by modality: PET (plain, legacy multi-frame, enhanced), nuclear medicine."""


@dataclass
class _Series:
    """The files of a series and the header of the first."""

    header: Dataset
    files: list[Path] = field(default_factory=list)

    def text(self, name: str) -> str:
        return clean(_plain(self.header.get(name)))

    @property
    def modality(self) -> str:
        return _MODALITIES[str(self.header.SOPClassUID)]

    @property
    def is_phantom(self) -> bool:
        """Whether the header says so: by the field for it, or by the word in a name or description."""
        names = ("PatientName", "PatientID", "StudyDescription", "SeriesDescription")
        worded = any("phantom" in str(self.header.get(name) or "").lower() for name in names)
        return worded or str(self.header.get("QualityControlImage") or "") in ("YES", "BOTH")

    @property
    def patient(self) -> str:
        """What tells patients apart; a study without a patient's number stands for itself."""
        number = str(self.header.get("PatientID") or "").strip()
        return f"patient {number}" if number else f"study {self.study}"

    @property
    def study(self) -> str:
        return str(self.header.get("StudyInstanceUID") or self.header.SeriesInstanceUID)

    @property
    def lacks_attenuation(self) -> bool:
        corrected = self.header.get("CorrectedImage")
        listed = [corrected] if isinstance(corrected, str) else list(corrected or [])
        return bool(listed) and "ATTN" not in listed


def look_through_dicom(folder: Path, look: Look, *, source: int) -> None:
    """Add the PET and SPECT series below a folder to what was found.

    Parameters
    ----------
    folder
        The folder; its files may lie in any order.
    look
        What was found so far; it grows.
    source
        Number of the data set.

    Raises
    ------
    InputError
        If the folder is not there, or holds no such series or both PET and SPECT.
    """
    if not folder.is_dir():
        raise InputError(str(folder), "is no folder", "name the folder that holds the DICOM files")
    series, owners, damaged = _gather(folder)
    if damaged:
        look.left_out.append(f"{damaged} DICOM files whose header cannot be read")
    modalities = {one.modality for one in series.values()}
    if len(modalities) > 1:
        what = "holds PET and SPECT series, and a study has one of them"
        raise InputError(str(folder), what, "make a study of each")
    if not modalities:
        raise InputError(str(folder), "holds no PET or reconstructed SPECT series", "name another folder")
    look.modality = modalities.pop()
    corrected = {one.study for one in series.values() if not one.lacks_attenuation}
    kept = [one for one in series.values() if not (one.lacks_attenuation and one.study in corrected)]
    if len(kept) < len(series):
        look.left_out.append(f"{len(series) - len(kept)} series without attenuation correction beside a corrected one")
    subjects: dict[str, str] = {}
    sessions: dict[str, dict[str, str]] = {}
    runs: dict[tuple[str, bool], int] = {}
    for one in sorted(kept, key=lambda one: (_day(one)[0], one.files[0])):
        group = "phantom" if one.is_phantom else "s"
        known = sum(label.startswith(group) for label in subjects.values())
        subject = subjects.setdefault(f"{group} {one.patient}", f"{group}{known + 1:03d}")
        visits = sessions.setdefault(subject, {})
        session = visits.setdefault(one.study, str(len(visits) + 1))
        runs[one.study, one.is_phantom] = run = runs.get((one.study, one.is_phantom), 0) + 1
        look.images.append(_image(one, owners, source, subject, session, run))


def _gather(folder: Path) -> tuple[dict[str, _Series], dict[Path, set[str]], int]:
    """Series by their UID; for each folder the series (and other files, as an empty name) at and below it; damage.

    The last is the number of DICOM files whose header cannot be read.
    """
    series: dict[str, _Series] = {}
    owners: dict[Path, set[str]] = {}
    seen: set[Path] = set()
    damaged = 0
    for place, folders, names in os.walk(folder, followlinks=True):
        real = Path(place).resolve()
        if real in seen:  # a link that leads back
            folders.clear()
            continue
        seen.add(real)
        folders[:] = sorted(below for below in folders if not below.startswith("."))
        for name in sorted(names):
            path = Path(place, name)
            header = None
            if not name.startswith(".") and name.upper() != "DICOMDIR":
                try:
                    header = _read(path)
                except Exception:  # damaged headers raise many kinds of error, with the header in their text
                    damaged += 1
            uid = str(header.get("SeriesInstanceUID") or "") if header is not None else ""
            damaged += header is not None and not uid
            if header is not None and uid:
                series.setdefault(uid, _Series(header)).files.append(path)
            for above in path.parents:
                owners.setdefault(above, set()).add(uid)
                if above == folder:
                    break
    return series, owners, damaged


def _read(path: Path) -> Dataset | None:
    """The named fields of an image file; None for any other file."""
    try:
        with silence():
            # Deflation packs the header too: a small file could fill the memory before anything is known.
            if read_file_meta_info(path).get("TransferSyntaxUID") == DeflatedExplicitVRLittleEndian:
                raise ValueError("deflated")
            header = pydicom.dcmread(path, stop_before_pixels=True, specific_tags=[*_COPIED, *_IN_MEMORY])
            storage = _MODALITIES.get(str(header.get("SOPClassUID")))
            if storage == "spect" and "RECON TOMO" not in list(header.get("ImageType") or []):
                return None
            return header if storage else None
    except InvalidDicomError:
        return None


def _day(one: _Series) -> tuple[str, str]:
    return day_of(one.text("AcquisitionDate"), one.text("AcquisitionDateTime"))


def _image(one: _Series, owners: dict[Path, set[str]], source: int, subject: str, session: str, run: int) -> FoundImage:
    own_folder = one.files[0].parent
    alone = len(owners[own_folder]) == 1 and all(file.parent == own_folder for file in one.files)
    acquired, remark = _day(one)
    method, kernel = one.text("ReconstructionMethod"), one.text("ConvolutionKernel")
    medicine = (one.header.get("RadiopharmaceuticalInformationSequence") or [Dataset()])[0]
    code = (medicine.get("RadionuclideCodeSequence") or [Dataset()])[0]
    return FoundImage(
        path=own_folder,
        source=source,
        phantom=one.is_phantom,
        subject=subject,
        session=session,
        run=str(run) if run > 1 else "",
        institution=one.text("InstitutionName"),
        scanner=one.text("ManufacturerModelName"),
        reconstruction=", ".join(filter(None, (method, kernel))),
        method=comparable([method, kernel]) if method or kernel else "",
        acquired=acquired,
        radionuclide=clean(_plain(code.get("CodeMeaning"))),
        files=() if alone else tuple(one.files),
        remarks=(remark,) if remark else (),
    )


def _plain(value: Any) -> Any:
    """Text or number; a value of several parts as one text."""
    if value is None or isinstance(value, int | float):
        return value
    return value if isinstance(value, str) else " ".join(map(str, value))
