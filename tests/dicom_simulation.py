"""Invented DICOM PET series, written field by field with pydicom and without any function of the library.

A volume is given as numbers (column, row, slice). Its slices are scaled to 16-bit integers one by one, each with a
slope of its own, as scanners do; the values that the files then mean are returned. File names are shuffled against the
slices' order, and every field that points to a person, a place, a device or a day carries one of `PLANTED`.
"""

from collections.abc import Callable
from pathlib import Path

import numpy as np
from numpy.typing import NDArray
from pydicom.dataset import Dataset, FileMetaDataset
from pydicom.uid import UID, ExplicitVRLittleEndian, generate_uid

PET_STORAGE = "1.2.840.10008.5.1.4.1.1.128"
ENHANCED_PET_STORAGE = "1.2.840.10008.5.1.4.1.1.130"
NUCLEAR_MEDICINE_STORAGE = "1.2.840.10008.5.1.4.1.1.20"

PLANTED = {
    "PatientName": "Plantedname^Secret",
    "PatientID": "PLANTEDNUMBER77",
    "PatientBirthDate": "19010203",
    "PatientAddress": "1 Plantedstreet",
    "OtherPatientIDs": "PLANTEDOTHER",
    "PatientComments": "plantedcomment",
    "ReferringPhysicianName": "Planteddoctor^A",
    "OperatorsName": "Plantedoperator^B",
    "InstitutionName": "Plantedclinic",
    "InstitutionAddress": "Plantedtown",
    "StationName": "PLANTEDSTATION",
    "DeviceSerialNumber": "PLANTEDSERIAL9",
    "AccessionNumber": "PLANTEDACC5",
    "StudyDescription": "plantedstudy",
    "SeriesDescription": "plantedseries",
    "ProtocolName": "plantedprotocol",
    "StudyDate": "20310405",
    "SeriesDate": "20310405",
    "AcquisitionDate": "20310405",
    "StudyTime": "112233",
    "SeriesTime": "112233",
    "FrameOfReferenceUID": "1.2.826.0.1.3680043.8.498.777000777",
}
"""Values that must come out nowhere."""

AXIAL = ((1.0, 0.0, 0.0), (0.0, 1.0, 0.0))
SAGITTAL = ((0.0, 1.0, 0.0), (0.0, 0.0, -1.0))
CORONAL = ((1.0, 0.0, 0.0), (0.0, 0.0, -1.0))

Change = Callable[[Dataset, int, int], "Dataset | None"]


def turned(degrees: float) -> tuple[tuple[float, float, float], tuple[float, float, float]]:
    """Axial slices turned about the patient's left-right axis."""
    angle = np.radians(degrees)
    return (1.0, 0.0, 0.0), (0.0, float(np.cos(angle)), float(np.sin(angle)))


def header(storage: str, series: str) -> Dataset:
    """A header with the planted values and no picture yet."""
    made = Dataset()
    made.file_meta = FileMetaDataset()
    made.file_meta.TransferSyntaxUID = ExplicitVRLittleEndian
    made.file_meta.MediaStorageSOPClassUID = UID(storage)
    made.SOPClassUID = storage
    made.SOPInstanceUID = generate_uid()
    made.file_meta.MediaStorageSOPInstanceUID = made.SOPInstanceUID
    made.SeriesInstanceUID = series
    for field, value in PLANTED.items():
        setattr(made, field, value)
    made.Modality = "PT"
    made.ManufacturerModelName = "Invented 3"
    made.Units = "BQML"
    made.DecayCorrection = "START"
    made.ReconstructionMethod = "OSEM 4i8s"
    made.ConvolutionKernel = "Gauss 4.0"
    made.CorrectedImage = ["DECY", "ATTN", "SCAT"]
    medicine = Dataset()
    medicine.RadiopharmaceuticalStartTime = "112233"
    medicine.RadionuclideHalfLife = 6586.2
    code = Dataset()
    code.CodeMeaning = "^18^Fluorine"
    medicine.RadionuclideCodeSequence = [code]
    made.RadiopharmaceuticalInformationSequence = [medicine]
    return made


def add_picture(made: Dataset, stored: NDArray[np.int16]) -> None:
    """Put pixels, shape (frames, rows, columns) or (rows, columns), into a header."""
    made.Rows, made.Columns = stored.shape[-2:]
    if stored.ndim == 3:
        made.NumberOfFrames = stored.shape[0]
    made.SamplesPerPixel = 1
    made.PhotometricInterpretation = "MONOCHROME2"
    made.BitsAllocated, made.BitsStored, made.HighBit, made.PixelRepresentation = 16, 16, 15, 1
    made.PixelData = stored.astype("<i2").tobytes()


def as_stored(picture: NDArray[np.float64]) -> tuple[NDArray[np.int16], float]:
    """A slice as 16-bit numbers, and the slope that makes its largest value 32000."""
    slope = float(f"{max(float(np.abs(picture).max()), 1e-6) / 32000:.9g}")
    return np.round(picture / slope).astype(np.int16), slope


def write_series(
    folder: Path,
    volume: NDArray[np.float64],
    *,
    between_columns_mm: float = 2.0,
    between_rows_mm: float = 2.0,
    slice_mm: float = 3.0,
    directions: tuple[tuple[float, float, float], tuple[float, float, float]] = AXIAL,
    origin_mm: tuple[float, float, float] = (-31.0, -17.0, 40.0),
    series: str | None = None,
    change: Change | None = None,
) -> NDArray[np.float64]:
    """Write a series, one file a slice, and return the values that its files mean.

    `volume` has shape (columns, rows, slices) or (columns, rows, slices, frames). `change(header, slice, frame)` may
    alter a header before it is written, or return None to leave the slice out.
    """
    folder.mkdir(parents=True, exist_ok=True)
    series = series or str(generate_uid())
    frames = volume[..., None] if volume.ndim == 3 else volume
    meant = np.empty(frames.shape)
    across, down = np.array(directions)
    normal = np.cross(across, down)
    names = np.random.default_rng(7).permutation(frames.shape[2] * frames.shape[3])
    for frame, number in np.ndindex(frames.shape[3], frames.shape[2]):
        stored, slope = as_stored(frames[:, :, number, frame])
        meant[:, :, number, frame] = stored * slope
        made = header(PET_STORAGE, series)
        made.ImagePositionPatient = [f"{value:.6f}" for value in np.array(origin_mm) + number * slice_mm * normal]
        made.ImageOrientationPatient = [f"{value:.8f}" for value in (*across, *down)]
        made.PixelSpacing = [between_rows_mm, between_columns_mm]
        # A thickness that is not the spacing, as with overlapping slices: it must mislead nobody.
        made.SliceThickness = 2 * slice_mm
        made.RescaleSlope, made.RescaleIntercept = slope, 0
        made.NumberOfSlices = frames.shape[2]
        made.ImageIndex = frame * frames.shape[2] + number + 1
        made.FrameReferenceTime = 1000.0 * frame + 500
        made.ActualFrameDuration = 1000 * (frame + 1)
        made.AcquisitionTime = f"{112233 + frame}"
        add_picture(made, stored.T)
        kept = change(made, number, frame) if change else made
        if kept is not None:
            name = f"IM{names[frame * frames.shape[2] + number]:05d}"
            kept.save_as(folder / name, enforce_file_format=True)
    return meant if volume.ndim == 4 else meant[..., 0]


def write_enhanced(
    folder: Path, volume: NDArray[np.float64], *, slice_mm: float = 3.0, alter: Callable[[Dataset], None] | None = None
) -> NDArray[np.float64]:
    """Write one multi-frame (enhanced) PET file, with geometry and slope for each frame, slices in falling order."""
    folder.mkdir(parents=True, exist_ok=True)
    frames = volume[..., None] if volume.ndim == 3 else volume
    made = header(ENHANCED_PET_STORAGE, generate_uid())
    shared, measures, orientation = Dataset(), Dataset(), Dataset()
    measures.PixelSpacing, measures.SliceThickness = [2.5, 2.0], slice_mm
    orientation.ImageOrientationPatient = [1, 0, 0, 0, 1, 0]
    shared.PixelMeasuresSequence, shared.PlaneOrientationSequence = [measures], [orientation]
    made.SharedFunctionalGroupsSequence = [shared]
    pictures, groups, meant = [], [], np.empty(frames.shape)
    for frame, place in np.ndindex(frames.shape[3], frames.shape[2]):
        number = frames.shape[2] - 1 - place
        stored, slope = as_stored(frames[:, :, number, frame])
        meant[:, :, number, frame] = stored * slope
        pictures.append(stored.T)
        group, plane, scale, content = Dataset(), Dataset(), Dataset(), Dataset()
        plane.ImagePositionPatient = [-31.0, -17.0, 40.0 + number * slice_mm]
        scale.RescaleSlope, scale.RescaleIntercept = slope, 0
        content.TemporalPositionIndex = frame + 1
        content.FrameAcquisitionDuration = 2000.0
        group.PlanePositionSequence, group.PixelValueTransformationSequence = [plane], [scale]
        group.FrameContentSequence = [content]
        groups.append(group)
    made.PerFrameFunctionalGroupsSequence = groups
    add_picture(made, np.array(pictures))
    if alter:
        alter(made)
    made.save_as(folder / "IM00000", enforce_file_format=True)
    return meant if volume.ndim == 4 else meant[..., 0]


def write_tomogram(
    folder: Path, volume: NDArray[np.float64], *, slice_mm: float = 3.0, alter: Callable[[Dataset], None] | None = None
) -> NDArray[np.float64]:
    """Write one nuclear medicine file with a reconstructed tomogram, (columns, rows, slices)."""
    folder.mkdir(parents=True, exist_ok=True)
    made = header(NUCLEAR_MEDICINE_STORAGE, generate_uid())
    made.Modality = "NM"
    made.ImageType = ["ORIGINAL", "PRIMARY", "RECON TOMO", "EMISSION"]
    detector = Dataset()
    detector.ImagePositionPatient, detector.ImageOrientationPatient = [-31.0, -17.0, 40.0], [1, 0, 0, 0, 1, 0]
    made.DetectorInformationSequence = [detector]
    made.PixelSpacing, made.SliceThickness, made.SpacingBetweenSlices = [2.5, 2.0], 2 * slice_mm, slice_mm
    made.NumberOfSlices = volume.shape[2]
    made.SliceVector = list(range(1, volume.shape[2] + 1))
    stored, slope = as_stored(volume)
    made.RescaleSlope, made.RescaleIntercept = slope, 0
    add_picture(made, stored.transpose(2, 1, 0))
    if alter:
        alter(made)
    made.save_as(folder / "IM00000", enforce_file_format=True)
    meant: NDArray[np.float64] = stored * np.float64(slope)
    return meant


def picture(shape: tuple[int, ...] = (9, 8, 7), seed: int = 3) -> NDArray[np.float64]:
    """Random values in slices of very different size, so that one slope for all would not do."""
    values = np.random.default_rng(seed).random(shape) * 100
    return values * np.array([1, 300, 2, 0.01, 5, 40, 7, 9])[: shape[2]].reshape(1, 1, -1, *[1] * (len(shape) - 3))


def assert_nothing_planted(text: str) -> None:
    """Fail if a text holds one of the planted values or a part of it."""
    parts = [part for value in PLANTED.values() for part in (value, *value.split("^"))]
    assert [part for part in parts if len(part) > 1 and part.lower() in text.lower()] == []


def edit(**fields: object) -> Change:
    """A change for `write_series` that sets fields in every header."""

    def change(made: Dataset, number: int, frame: int) -> Dataset:
        for field, value in fields.items():
            setattr(made, field, value)
        return made

    return change


def without(*fields: str) -> Change:
    """A change for `write_series` that takes fields out of every header."""

    def change(made: Dataset, number: int, frame: int) -> Dataset:
        for field in fields:
            del made[field]
        return made

    return change
