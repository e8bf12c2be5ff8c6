"""What is read of DICOM headers: geometry, scale and time of each slice, and a short list of facts for the records.

Only the fields named here are ever taken from a file. Names, dates of birth, numbers of patients, devices and places
are not among them, and dates and times serve to tell time frames apart and go no further.
"""

import math
from pathlib import Path
from typing import Any

import numpy as np
import pydicom
from pydicom.dataset import Dataset
from pydicom.filereader import read_file_meta_info
from pydicom.pixels import get_decoder
from pydicom.uid import UID, DeflatedExplicitVRLittleEndian, JPEGBaseline8Bit, JPEGExtended12Bit, JPEGLSNearLossless

from evenblur.images.dicom_stacking import SeriesError, Slice
from evenblur.images.identity import IDENTITY_REMOVED, PATIENT_FIELDS

ALLOWED_FIELDS = (
    "Modality",
    "ManufacturerModelName",
    "SoftwareVersions",
    "NumberOfIterations",
    "NumberOfSubsets",
    "Units",
    "SeriesType",
    "ReconstructionMethod",
    "ConvolutionKernel",
    "CorrectedImage",
    "DecayCorrection",
    "AttenuationCorrectionMethod",
    "ScatterCorrectionMethod",
    "RandomsCorrectionMethod",
    "SliceThickness",
    "SpacingBetweenSlices",
    "PixelSpacing",
    "ActualFrameDuration",
    "RadionuclideHalfLife",
    "Radionuclide",
)
"""The header fields that records may hold. `Radionuclide` is the meaning of the radionuclide's code."""

FREE_PICTURE_BYTES = 16 << 20
"""Compressed pictures of a file that take no more than this may be packed as tightly as they like."""

TIGHTEST_PICTURES = 25
"""Pictures with noise in them pack to a third or so without loss, never to a smaller share than one in this many."""

_LONGEST_TEXT = 64  # what DICOM allows in a text of this kind; a longer one is not such a text

_GEOMETRY_FIELDS = (
    "SOPClassUID",
    "SOPInstanceUID",
    "SeriesInstanceUID",
    "ImageType",
    "Rows",
    "Columns",
    "NumberOfFrames",
    "SamplesPerPixel",
    "BitsAllocated",
    "LossyImageCompression",
    "ImagePositionPatient",
    "ImageOrientationPatient",
    "RescaleSlope",
    "RescaleIntercept",
    "ModalityLUTSequence",
    "ImageIndex",
    "NumberOfSlices",
    "SliceVector",
    "FrameReferenceTime",
    "TemporalPositionIdentifier",
    "TriggerTime",
    "AcquisitionDate",
    "AcquisitionTime",
    "DetectorInformationSequence",
    "SharedFunctionalGroupsSequence",
    "PerFrameFunctionalGroupsSequence",
    "RadiopharmaceuticalInformationSequence",
)
_INSIDE_RADIOPHARMACEUTICAL = ("RadionuclideHalfLife", "Radionuclide")
_READ_FIELDS = [*_GEOMETRY_FIELDS, *(name for name in ALLOWED_FIELDS if name not in _INSIDE_RADIOPHARMACEUTICAL)]
# Read to see whether they are filled, and for nothing else.
_COUNTED_FIELDS = [*PATIENT_FIELDS, IDENTITY_REMOVED]

# PET, one slice a file and several: every slice may have a scale of its own, so that none can be assumed.
_PET = ("1.2.840.10008.5.1.4.1.1.128", "1.2.840.10008.5.1.4.1.1.130")
_NUCLEAR_MEDICINE = "1.2.840.10008.5.1.4.1.1.20"
_LOSSY = (JPEGBaseline8Bit, JPEGExtended12Bit, JPEGLSNearLossless)
_EXPORT_PLAIN = "export the series again, uncompressed"
_EXPORT_IMAGE = "export the reconstructed image as one series of slices"


def read_header(path: Path) -> Dataset:
    """Read the named fields of a file's header.

    Raises
    ------
    SeriesError
        If the file's pixel data are stored in a way that cannot be read, or more pixels are claimed than it can hold.
    pydicom.errors.InvalidDicomError
        If the file is not DICOM.
    """
    # Deflation packs the whole data set, header and all: a small file could fill the memory before anything is known.
    if read_file_meta_info(path).get("TransferSyntaxUID") == DeflatedExplicitVRLittleEndian:
        raise SeriesError("is compressed as a whole (deflated)", _EXPORT_PLAIN)
    header = pydicom.dcmread(path, stop_before_pixels=True, specific_tags=[*_READ_FIELDS, *_COUNTED_FIELDS])
    if "Rows" not in header or "Columns" not in header:
        raise SeriesError("is no picture", "keep the slices of one image only in the folder", "not_a_volume")
    _check_storage(header, path.stat().st_size)
    return header


def _check_storage(header: Dataset, file_bytes: int) -> None:
    rows, columns, frames = int(header.Rows), int(header.Columns), number_of_frames(header)
    if min(rows, columns, frames) < 1:
        raise SeriesError("has no rows, columns or frames", code="not_a_volume")
    if int(header.get("SamplesPerPixel") or 1) != 1:
        raise SeriesError("is a colour picture", _EXPORT_IMAGE, "not_a_volume")
    syntax: UID | None = header.file_meta.get("TransferSyntaxUID")
    if syntax is None:
        raise SeriesError("does not say how its pixels are stored", "export the series again")
    if syntax in _LOSSY or header.get("LossyImageCompression") == "01":
        raise SeriesError("has been compressed with loss, which changes its values", _EXPORT_PLAIN)
    try:
        decoder = get_decoder(syntax)
        known = decoder.is_available
    except NotImplementedError as error:
        raise SeriesError("holds pixels stored in a way that is not known", _EXPORT_PLAIN) from error
    if not known:
        # The name comes from the list of transfer syntaxes, not from the file.
        raise SeriesError(f"holds compressed pixels ({syntax.name}) for which no decoder is there", _EXPORT_PLAIN)
    if not syntax.is_encapsulated:
        claimed = rows * columns * frames * int(header.get("BitsAllocated") or 8) // 8
        if claimed > file_bytes:
            raise SeriesError("is cut short: it has fewer pixels than its header says")
    elif frames > file_bytes or _packed_too_tightly(rows * columns * frames, header, file_bytes):
        raise SeriesError("claims more pixels than its size can hold", code="too_large")


def _packed_too_tightly(pixels: int, header: Dataset, file_bytes: int) -> bool:
    """Whether compressed pixels unpack to what no picture does; small pictures hurt no machine, however empty."""
    claimed = pixels * int(header.get("BitsAllocated") or 8) // 8
    if file_bytes > 2 * claimed + FREE_PICTURE_BYTES:
        return True  # compression without loss never makes a picture longer by so much: something else would unpack
    return claimed > FREE_PICTURE_BYTES and claimed > TIGHTEST_PICTURES * file_bytes


def number_of_frames(header: Dataset) -> int:
    """Number of pictures in the file; 1 where the header does not say."""
    return int(header.get("NumberOfFrames") or 1)


def slices_of(header: Dataset, file: Path) -> list[Slice]:
    """The slices of one file: its only picture, or those of a multi-frame file that gives their geometry.

    Raises
    ------
    SeriesError
        If the header gives no position, orientation or spacing, or no valid scale.
    """
    if "ModalityLUTSequence" in header:
        raise SeriesError("gives its values by a table instead of a slope", _EXPORT_IMAGE)
    if header.get("SOPClassUID") == _NUCLEAR_MEDICINE:
        slices = _nuclear_medicine_slices(header, file)
    elif "PerFrameFunctionalGroupsSequence" in header:
        slices = _enhanced_slices(header, file)
    elif number_of_frames(header) == 1:
        slices = [_single_slice(header, file)]
    else:
        raise SeriesError("holds several frames without their positions", _EXPORT_IMAGE)
    for part in slices:
        numbers = (*part.position_mm, part.slope, part.intercept, part.between_rows_mm, part.between_columns_mm)
        if not all(map(math.isfinite, numbers)) or min(numbers[-2:]) <= 0:
            raise SeriesError("has a position, spacing or scale that is no valid number", "export the series again")
    return slices


def _single_slice(header: Dataset, file: Path) -> Slice:
    return Slice(
        file=file,
        index=None,
        times=_times_of(header),
        duration_ms=_number(header.get("ActualFrameDuration")),
        **_plane(header.get("ImagePositionPatient"), header.get("ImageOrientationPatient")),
        **_picture(header, header.get("PixelSpacing")),
        **_scale(header, header),
    )


def _times_of(header: Dataset) -> dict[str, Any]:
    times: dict[str, Any] = {}
    index, slices = _number(header.get("ImageIndex")), _number(header.get("NumberOfSlices"))
    if index is not None and slices:
        times["image_index"] = (int(index) - 1) // int(slices)
    for key, keyword in (
        ("reference_time", "FrameReferenceTime"),
        ("temporal_position", "TemporalPositionIdentifier"),
        ("trigger_time", "TriggerTime"),
    ):
        value = _number(header.get(keyword))
        if value is not None:
            times[key] = value
    if header.get("AcquisitionTime"):
        times["acquired"] = f"{header.get('AcquisitionDate') or ''} {header.AcquisitionTime}"
    return times


def _enhanced_slices(header: Dataset, file: Path) -> list[Slice]:
    groups = header.PerFrameFunctionalGroupsSequence
    if len(groups) != number_of_frames(header):
        raise SeriesError("describes another number of frames than it holds", "export the series again")
    shared = _first(header.get("SharedFunctionalGroupsSequence"))
    return [_enhanced_slice(header, file, index, group, shared) for index, group in enumerate(groups)]


def _enhanced_slice(header: Dataset, file: Path, index: int, group: Dataset, shared: Dataset) -> Slice:
    def part(name: str) -> Dataset:
        return _first(group.get(name)) or _first(shared.get(name))

    content = part("FrameContentSequence")
    times: dict[str, Any] = {}
    position = _number(content.get("TemporalPositionIndex"))
    if position is not None:
        times["temporal_position"] = position
    moment = content.get("FrameReferenceDateTime") or content.get("FrameAcquisitionDateTime")
    if moment:
        times["acquired"] = str(moment)
    return Slice(
        file=file,
        index=index,
        times=times,
        duration_ms=_number(content.get("FrameAcquisitionDuration")),
        **_plane(
            part("PlanePositionSequence").get("ImagePositionPatient"),
            part("PlaneOrientationSequence").get("ImageOrientationPatient"),
        ),
        **_picture(header, part("PixelMeasuresSequence").get("PixelSpacing")),
        **_scale(header, part("PixelValueTransformationSequence")),
    )


def _nuclear_medicine_slices(header: Dataset, file: Path) -> list[Slice]:
    if "RECON TOMO" not in list(header.get("ImageType") or []):
        raise SeriesError("is no reconstructed tomographic image", _EXPORT_IMAGE, "not_a_volume")
    detector = _first(header.get("DetectorInformationSequence"))
    plane = _plane(detector.get("ImagePositionPatient"), detector.get("ImageOrientationPatient"))
    spacing = _number(header.get("SpacingBetweenSlices"))
    if not spacing:  # the slices' thickness says nothing of their distance
        raise SeriesError("does not give the spacing between its slices", _EXPORT_IMAGE)
    frames = number_of_frames(header)
    numbers = [int(number) for number in header.get("SliceVector") or range(1, frames + 1)]
    if len(numbers) != frames:
        raise SeriesError("describes another number of frames than it holds", "export the series again")
    step = spacing * np.cross(plane["along_row"], plane["along_column"])
    start = np.array(plane.pop("position_mm"))
    seen: dict[int, int] = {}
    slices = []
    for index, number in enumerate(numbers):
        seen[number] = seen.get(number, 0) + 1
        x, y, z = (start + (number - 1) * step).tolist()
        slices.append(
            Slice(
                file=file,
                index=index if frames > 1 else None,
                position_mm=(x, y, z),
                times={"occurrence": seen[number]},
                duration_ms=None,
                **plane,
                **_picture(header, header.get("PixelSpacing")),
                **_scale(header, header),
            )
        )
    return slices


def _plane(position: Any, orientation: Any) -> dict[str, Any]:
    if position is None or orientation is None or len(position) != 3 or len(orientation) != 6:
        raise SeriesError("gives no position and orientation of its slices", _EXPORT_IMAGE)
    directions = np.array([float(value) for value in orientation]).reshape(2, 3)
    lengths = np.linalg.norm(directions, axis=1)
    if not np.all(np.abs(lengths - 1.0) < 0.01) or abs(float(directions[0] @ directions[1])) > 0.01:
        raise SeriesError("gives an orientation that is none", _EXPORT_IMAGE)
    across, down = (directions / lengths[:, None]).tolist()
    x, y, z = (float(value) for value in position)
    return {"position_mm": (x, y, z), "along_row": tuple(across), "along_column": tuple(down)}


def _picture(header: Dataset, spacing: Any) -> dict[str, Any]:
    if spacing is None or len(spacing) != 2:
        raise SeriesError("gives no pixel spacing", _EXPORT_IMAGE)
    # The first number is the distance between rows, that is along a column.
    between_rows, between_columns = (float(value) for value in spacing)
    return {
        "rows": int(header.Rows),
        "columns": int(header.Columns),
        "between_rows_mm": between_rows,
        "between_columns_mm": between_columns,
    }


def _scale(header: Dataset, place: Dataset) -> dict[str, Any]:
    slope, intercept = _number(place.get("RescaleSlope")), _number(place.get("RescaleIntercept"))
    if slope is None and header.get("SOPClassUID") in _PET:
        raise SeriesError("gives no slope for its values", "export the series again")
    return {"slope": 1.0 if slope is None else slope, "intercept": 0.0 if intercept is None else intercept}


def _number(value: Any) -> float | None:
    return None if value is None or value == "" else float(value)


def _first(sequence: Any) -> Dataset:
    return sequence[0] if sequence else Dataset()


def header_facts(header: Dataset) -> dict[str, Any]:
    """The facts of a header that records may hold: the fields of `ALLOWED_FIELDS` as plain text and numbers.

    Empty fields, and text that is too long to be what the field is for, are left out.

    >>> header = Dataset()
    >>> header.PatientName, header.Units, header.PixelSpacing = "Invented^Name", "BQML", [2, 2.5]
    >>> header_facts(header)
    {'Units': 'BQML', 'PixelSpacing': [2.0, 2.5]}
    """
    medicine = _first(header.get("RadiopharmaceuticalInformationSequence"))
    code = _first(medicine.get("RadionuclideCodeSequence"))
    inside = {"RadionuclideHalfLife": medicine.get("RadionuclideHalfLife"), "Radionuclide": code.get("CodeMeaning")}
    facts = {name: _plain(inside[name] if name in inside else header.get(name)) for name in ALLOWED_FIELDS}
    return {name: value for name, value in facts.items() if value not in (None, "", [])}


def _plain(value: Any) -> Any:
    if value is None:
        return None
    if isinstance(value, int | float):
        return float(value) if math.isfinite(value) else None
    if isinstance(value, str):
        text = " ".join(value.split())
        return text if len(text) <= _LONGEST_TEXT and text.isprintable() else None
    try:
        parts = [_plain(part) for part in value]
    except TypeError:
        return None
    return None if None in parts else parts
