"""DICOM folders that cannot be used: one line each, with nothing of a header in it."""

import json
import shutil
from pathlib import Path

import numpy as np
import pydicom
import pytest
from pydicom.dataset import Dataset
from pydicom.uid import JPEG2000Lossless, RLELossless

from dicom_simulation import (
    assert_nothing_planted,
    edit,
    picture,
    without,
    write_enhanced,
    write_series,
    write_tomogram,
)
from evenblur.errors import InputError
from evenblur.images.harmonise import harmonise_scan
from evenblur.images.reading import open_image
from evenblur.intake import take_in_image

# Shipped with pydicom; its own search for test files would look on the network for more.
FOREIGN = sorted(path for path in (Path(pydicom.__file__).parent / "data" / "test_files").rglob("*") if path.is_file())
NAME = "raw/scan 1"


def refused(folder: Path) -> InputError:
    """The error with which a folder is refused, at opening or at reading; with nothing of a header or file in it."""
    with pytest.raises(InputError) as caught:
        list(open_image(folder, name=NAME).iter_frames())
    message = str(caught.value)
    assert message.startswith(f"{NAME}: ")
    assert "\n" not in message
    assert len(message) < 250
    assert_nothing_planted(message)
    assert not any(path.name in message for path in folder.rglob("*") if path.is_file())
    assert caught.value.code in {"image_unreadable", "not_a_volume", "too_large"}
    return caught.value


@pytest.mark.parametrize(
    ("write", "alter", "words"),
    [
        (write_enhanced, lambda m: m.__delattr__("SharedFunctionalGroupsSequence"), "no position and orientation"),
        (write_enhanced, lambda m: m.PerFrameFunctionalGroupsSequence.pop(), "another number of frames"),
        (write_enhanced, lambda m: m.__delattr__("PerFrameFunctionalGroupsSequence"), "without their positions"),
        (
            write_enhanced,
            lambda m: m.PerFrameFunctionalGroupsSequence[2].__delattr__("PixelValueTransformationSequence"),
            "no slope",
        ),
        (write_tomogram, lambda m: m.__delattr__("DetectorInformationSequence"), "no position and orientation"),
        (write_tomogram, lambda m: m.__delattr__("SpacingBetweenSlices"), "spacing between its slices"),
        (write_tomogram, lambda m: setattr(m, "SliceVector", [1, 2]), "another number of frames"),
        (write_tomogram, lambda m: setattr(m, "ImageType", ["ORIGINAL", "PRIMARY", "TOMO"]), "no reconstructed"),
    ],
)
def test_multi_frame_file_without_geometry_is_refused(tmp_path, write, alter, words):
    write(tmp_path / "s", picture(), alter=alter)
    assert words in str(refused(tmp_path / "s"))


def claim_syntax(uid):
    def change(made: Dataset, number: int, frame: int) -> Dataset:
        made.file_meta.TransferSyntaxUID = uid
        made["PixelData"].is_undefined_length = True
        made.PixelData = pydicom.encaps.encapsulate([b"\xff\xd8 no picture"])
        made["PixelData"].is_undefined_length = True
        return made

    return change


@pytest.mark.parametrize(
    ("uid", "words"),
    [
        ("1.2.840.10008.1.2.4.50", "with loss"),
        ("1.2.840.10008.1.2.4.102", "not known"),  # a film
        ("1.2.840.10008.1.2.4.201", "no decoder"),  # high-throughput JPEG 2000
        (JPEG2000Lossless, "cannot be read"),
    ],
)
def test_compressed_pixels_that_cannot_be_decoded_are_refused(tmp_path, uid, words):
    write_series(tmp_path / "s", picture(), change=claim_syntax(uid))
    assert words in str(refused(tmp_path / "s"))


def test_deflated_file_is_refused_before_it_is_inflated(tmp_path):
    write_series(tmp_path / "s", picture(), change=None)
    file = next((tmp_path / "s").iterdir())
    made = pydicom.dcmread(file)
    made.file_meta.TransferSyntaxUID = pydicom.uid.DeflatedExplicitVRLittleEndian
    made.save_as(file)
    assert "deflated" in str(refused(tmp_path / "s"))


def test_missing_slice_is_named(tmp_path):
    write_series(tmp_path / "s", picture(), change=lambda made, number, frame: None if number == 4 else made)
    message = str(refused(tmp_path / "s"))
    assert "the gap between slices 4 and 5 of 6 (counted by position) is 6.00 mm where 3.00 mm is usual" in message


def shift(axis, by_mm, slices=(4, 5, 6)):
    def change(made: Dataset, number: int, frame: int) -> Dataset:
        if number in slices:
            position = [float(value) for value in made.ImagePositionPatient]
            position[axis] += by_mm
            made.ImagePositionPatient = position
        return made

    return change


def test_uneven_spacing_is_refused_and_rounding_is_not(tmp_path):
    write_series(tmp_path / "gap", picture(), change=shift(2, 1.0))
    assert "slices 4 and 5 of 7" in str(refused(tmp_path / "gap"))
    write_series(tmp_path / "round", picture(), change=shift(2, 0.05, slices=(3,)))
    assert open_image(tmp_path / "round").grid.voxel_mm == (2.0, 2.0, 3.0)


def test_slice_beside_the_others_is_refused(tmp_path):
    write_series(tmp_path / "s", picture(), change=shift(0, 1.0, slices=(2,)))
    assert "slice 3 of 7 (counted by position) lies beside the line" in str(refused(tmp_path / "s"))


def test_sheared_stack_is_refused(tmp_path):
    def change(made: Dataset, number: int, frame: int) -> Dataset:
        return shift(1, 0.5 * number, slices=(number,))(made, number, frame)

    write_series(tmp_path / "s", picture(), change=change)
    assert "sheared" in str(refused(tmp_path / "s"))


def test_copied_slice_is_refused(tmp_path):
    write_series(tmp_path / "s", picture())
    files = sorted((tmp_path / "s").iterdir())
    shutil.copy(files[0], tmp_path / "s" / "ZZ")
    assert "files 1 and 8 of 8 (counted by name) are the same slice" in str(refused(tmp_path / "s"))


def test_second_slice_at_one_place_is_refused(tmp_path):
    write_series(tmp_path / "s", picture(), change=shift(2, -3.0, slices=(3,)))
    assert "slice 3 of 6 (counted by position) is there twice, most others once" in str(refused(tmp_path / "s"))


def test_slice_missing_in_one_time_frame_is_refused(tmp_path):
    lacking = lambda made, number, frame: None if (number, frame) == (2, 1) else made  # noqa: E731
    write_series(tmp_path / "s", picture((6, 5, 4, 3)), change=lacking)
    assert "slice 3 of 4 (counted by position) is there twice, most others 3 times" in str(refused(tmp_path / "s"))


def test_time_frames_without_a_time_are_refused(tmp_path):
    gone = without("ImageIndex", "FrameReferenceTime", "AcquisitionTime")
    write_series(tmp_path / "s", picture((6, 5, 4, 2)), change=gone)
    assert "no time tells the frames apart" in str(refused(tmp_path / "s"))


def test_two_series_are_refused(tmp_path):
    write_series(tmp_path / "s", picture())
    write_series(tmp_path / "s" / "more", picture())
    assert "more than one series" in str(refused(tmp_path / "s"))


@pytest.mark.parametrize(
    ("fields", "words"),
    [
        ({"PixelSpacing": [2.0, 0.0]}, "no valid number"),
        ({"ImageOrientationPatient": [1, 0, 0, 1, 0, 0]}, "an orientation that is none"),
        ({"ImageOrientationPatient": [0, 0, 0, 0, 0, 0]}, "an orientation that is none"),
        ({"ImagePositionPatient": None}, "no position"),
        ({"RescaleSlope": None}, "no slope"),
        ({"PixelSpacing": None}, "no pixel spacing"),
        ({"SamplesPerPixel": 3}, "colour"),
        ({"Rows": 60000, "Columns": 60000}, "cut short"),
        ({"NumberOfFrames": 2147483647}, "cut short"),
        ({"Rows": None}, "cannot be read"),
        ({"BitsAllocated": 7}, "cannot be read"),
    ],
)
def test_header_that_makes_no_sense_is_refused(tmp_path, fields, words):
    write_series(tmp_path / "s", picture(), change=edit(**fields))
    assert words in str(refused(tmp_path / "s"))


@pytest.mark.parametrize("field", ["ImagePositionPatient", "ImageOrientationPatient"])
def test_slices_that_are_turned_or_of_other_size_are_refused(tmp_path, field):
    values = {"ImagePositionPatient": None, "ImageOrientationPatient": [0, 1, 0, 0, 0, -1]}

    def change(made: Dataset, number: int, frame: int) -> Dataset:
        if number == 2 and field == "ImageOrientationPatient":
            made.ImageOrientationPatient = values[field]
        elif number == 2:
            made.Rows, made.Columns = made.Columns, made.Rows
        return made

    write_series(tmp_path / "s", picture(), change=change)
    assert ("turned" if field == "ImageOrientationPatient" else "differ in rows") in str(refused(tmp_path / "s"))


def test_one_slice_is_no_volume(tmp_path):
    write_series(tmp_path / "s", picture((6, 5, 1)))
    assert refused(tmp_path / "s").code == "not_a_volume"


def test_volume_that_claims_too_much_is_refused_before_memory_is_taken(tmp_path):
    # Compressed slices of 50000 x 50000 pixels: the files are small, two of them claim 40 GB.
    def change(made: Dataset, number: int, frame: int) -> Dataset:
        made.compress(RLELossless)
        made.Rows = made.Columns = 50000
        return made

    write_series(tmp_path / "s", picture((6, 5, 2)), change=change)
    assert refused(tmp_path / "s").code == "too_large"


@pytest.mark.parametrize("keep", [0.999, 0.6, 0.3, 0.02])
def test_truncated_file_is_refused(tmp_path, keep):
    write_series(tmp_path / "s", picture((40, 40, 3)))
    file = sorted((tmp_path / "s").iterdir())[1]
    file.write_bytes(file.read_bytes()[: int(file.stat().st_size * keep)])
    assert refused(tmp_path / "s").code == "image_unreadable"


def test_deeply_nested_sequences_are_refused(tmp_path):
    write_series(tmp_path / "s", picture())
    file = next((tmp_path / "s").iterdir())
    whole = file.read_bytes()
    # (0054,0016) radiopharmaceutical information, of undefined length, inside itself twenty thousand times.
    start = b"\x54\x00\x16\x00SQ\x00\x00\xff\xff\xff\xff" + b"\xfe\xff\x00\xe0\xff\xff\xff\xff"
    end = b"\xfe\xff\x0d\xe0\0\0\0\0" + b"\xfe\xff\xdd\xe0\0\0\0\0"
    place = whole.index(b"\x54\x00\x16\x00SQ")
    file.write_bytes(whole[:place] + start * 20000 + end * 20000 + whole[place:])
    assert "header that cannot be read" in str(refused(tmp_path / "s"))


@pytest.mark.parametrize("write", [write_series, write_enhanced, write_tomogram])
def test_damaged_bytes_are_held_with_one_line_or_read(tmp_path, write):
    write(tmp_path / "s", picture((6, 5, 3)))
    file = min((tmp_path / "s").iterdir())
    whole = file.read_bytes()
    draw = np.random.default_rng(1)
    held = 0
    for _ in range(40):
        damaged = bytearray(whole)
        for place in draw.integers(0, len(whole) - 10, draw.integers(1, 5)):
            if draw.random() < 0.3:
                del damaged[place : place + 3]
            else:
                damaged[place] = draw.integers(0, 256)
        file.write_bytes(damaged)
        record = take_in_image(tmp_path / "s", name=NAME, item="scan", key="k")
        held += len(record["holds"])
        assert all("\n" not in problem for problem in record["problems"])
        assert_nothing_planted(json.dumps(record))
    assert held > 10  # the damage does reach what is read


def test_text_in_place_of_a_number_is_not_quoted(tmp_path, caplog, capfd):
    write_series(tmp_path / "s", picture())
    for file in (tmp_path / "s").iterdir():
        whole = file.read_bytes()
        assert b"-31.000000" in whole
        file.write_bytes(whole.replace(b"-31.000000", b"Plantednam"))
    assert "header that cannot be read" in str(refused(tmp_path / "s"))
    assert_nothing_planted(caplog.text + "".join(capfd.readouterr()))


def test_files_beside_the_series_are_ignored_and_others_are_not(tmp_path):
    write_series(tmp_path / "s", picture())
    for name in ("README.txt", "readme", "DICOMDIR", ".hidden", "Thumbs.db"):
        (tmp_path / "s" / name).write_text("no picture")
    assert open_image(tmp_path / "s").grid.shape == (9, 8, 7)
    (tmp_path / "s" / "AA-Plantedname.txt").write_text("Plantedname")
    assert "file 1 of 8 (counted by name) is not DICOM" in str(refused(tmp_path / "s"))


def test_empty_folder_is_refused(tmp_path):
    (tmp_path / "s").mkdir()
    assert "holds no DICOM file" in str(refused(tmp_path / "s"))


@pytest.mark.parametrize("file", FOREIGN, ids=lambda path: path.name)
def test_foreign_or_broken_file_is_held_with_one_line(tmp_path, file):
    name = "other" if file.name.startswith(("DICOMDIR", "README")) else file.name
    (tmp_path / "s").mkdir()
    shutil.copy(file, tmp_path / "s" / name)
    record = take_in_image(tmp_path / "s", name=NAME, item="scan", key="k")
    assert len(record["holds"]) == len(record["problems"]) == 1
    problem = record["problems"][0]
    assert "\n" not in problem
    assert len(problem) < 200
    assert name not in problem
    try:
        person = str(pydicom.dcmread(file, stop_before_pixels=True).get("PatientName") or "")
    except Exception:
        person = ""
    assert len(person) < 2 or person not in json.dumps(record)


def test_result_inside_the_series_is_refused(tmp_path):
    write_series(tmp_path / "s", picture())
    with pytest.raises(InputError, match="own folder"):
        harmonise_scan(
            tmp_path / "s", in_plane_mm=5, axial_mm=5, out=tmp_path / "s" / "h.nii", record=tmp_path / "h.json"
        )
