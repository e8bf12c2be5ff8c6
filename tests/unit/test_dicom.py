"""A folder with one DICOM series as an image: order, scale, geometry, time frames, and that no name gets out."""

import json
import subprocess
import sys
from pathlib import Path

import nibabel as nib
import numpy as np
import pydicom
import pytest
import SimpleITK
from pydicom.dataset import Dataset
from pydicom.uid import RLELossless

from dicom_simulation import (
    AXIAL,
    CORONAL,
    SAGITTAL,
    assert_nothing_planted,
    edit,
    picture,
    turned,
    without,
    write_enhanced,
    write_series,
    write_tomogram,
)
from evenblur.errors import InputError
from evenblur.images.digests import folder_sha256
from evenblur.images.harmonise import harmonise_scan
from evenblur.images.reading import open_image
from evenblur.intake import take_in_image

SCRIPTS = Path(__file__).parents[2] / "scripts"
NAME = "raw/scan 1"


def test_slices_are_ordered_by_position_and_scaled_one_by_one(tmp_path):
    meant = write_series(tmp_path / "s", picture())
    image = open_image(tmp_path / "s")
    # The stored numbers and slopes are exact in double precision; only their product is rounded.
    np.testing.assert_allclose(image.frame(0), meant, rtol=1e-14)
    assert image.grid.shape == (9, 8, 7)
    assert image.frames == 1
    assert image.frame(0).dtype == np.float64


def test_intercept_is_added_after_the_slope(tmp_path):
    meant = write_series(tmp_path / "s", picture(), change=edit(RescaleIntercept=-5))
    np.testing.assert_allclose(open_image(tmp_path / "s").frame(0), meant - 5, rtol=1e-12, atol=1e-12)


def test_pixel_spacing_is_row_distance_first(tmp_path):
    write_series(tmp_path / "s", picture(), between_columns_mm=2.0, between_rows_mm=2.5, slice_mm=3.25)
    image = open_image(tmp_path / "s")
    # Array axes are (column, row, slice): steps along them are the distances between columns, rows, slices.
    assert image.grid.voxel_mm == (2.0, 2.5, 3.25)
    expected = [[-2.0, 0, 0, 31.0], [0, -2.5, 0, 17.0], [0, 0, 3.25, 40.0], [0, 0, 0, 1]]
    np.testing.assert_allclose(image.source.affine, expected, atol=1e-9)


@pytest.mark.parametrize(
    ("directions", "axial_axis", "oblique_deg"),
    [(AXIAL, 2, 0.0), (SAGITTAL, 1, 0.0), (CORONAL, 1, 0.0), (turned(12.0), 2, 12.0)],
    ids=["axial", "sagittal", "coronal", "oblique"],
)
def test_voxels_lie_where_another_reader_puts_them(tmp_path, directions, axial_axis, oblique_deg):
    sizes = {"between_columns_mm": 2.0, "between_rows_mm": 2.5, "slice_mm": 3.25}
    meant = write_series(tmp_path / "s", picture(), directions=directions, **sizes)
    image = open_image(tmp_path / "s")
    assert image.grid.axial_axis == axial_axis
    # The tilt is what the cosines were written with; they have eight digits.
    assert image.grid.oblique_deg == pytest.approx(oblique_deg, abs=1e-3)
    reader = SimpleITK.ImageSeriesReader()
    reader.SetFileNames(SimpleITK.ImageSeriesReader.GetGDCMSeriesFileNames(str(tmp_path / "s")))
    other = reader.Execute()
    ours = image.frame(0)
    for voxel in np.ndindex(*ours.shape):
        x, y, z, _ = image.source.affine @ (*voxel, 1)
        place = other.TransformPhysicalPointToContinuousIndex((-x, -y, z))
        # Positions have six digits after the point, so indices agree to better than 1e-4.
        np.testing.assert_allclose(place, np.round(place), atol=1e-4)
        there = tuple(int(index) for index in np.round(place))
        # The other reader scales in single precision.
        assert other.GetPixel(there) == pytest.approx(ours[voxel], rel=1e-6)
    np.testing.assert_allclose(ours, meant, rtol=1e-14)


def test_position_follows_the_equation_of_the_standard(tmp_path):
    across, down = turned(20.0)
    write_series(tmp_path / "s", picture(), directions=(across, down), between_columns_mm=2.0, between_rows_mm=2.5)
    image = open_image(tmp_path / "s")
    for file in (tmp_path / "s").iterdir():
        made = pydicom.dcmread(file)
        # DICOM PS3.3 C.7.6.2.1.1: position + row direction x columns + column direction x rows.
        place = np.array(made.ImagePositionPatient, float) + 4 * 2.0 * np.array(across) + 3 * 2.5 * np.array(down)
        number = made.ImageIndex - 1
        ours = image.source.affine @ (4, 3, number, 1)
        np.testing.assert_allclose(ours[:3], place * [-1, -1, 1], atol=1e-5)  # positions have six digits
        assert image.frame(0)[4, 3, number] == pytest.approx(made.pixel_array[3, 4] * float(made.RescaleSlope))


@pytest.mark.parametrize(
    "missing",
    [
        (),
        ("FrameReferenceTime", "AcquisitionTime"),
        ("ImageIndex", "AcquisitionTime"),
        ("NumberOfSlices", "FrameReferenceTime"),
    ],
    ids=["by all", "by index", "by reference time", "by acquisition time"],
)
def test_time_frames_are_told_apart(tmp_path, missing):
    meant = write_series(tmp_path / "s", picture((6, 5, 4, 3)), change=without(*missing))
    image = open_image(tmp_path / "s")
    assert image.frames == 3
    assert image.source.shape == (6, 5, 4, 3)
    for index, frame in enumerate(image.iter_frames()):
        np.testing.assert_allclose(frame, meant[..., index], rtol=1e-14)
    assert image.sidecar_fields["FrameDuration"] == [1.0, 2.0, 3.0]


def test_index_that_counts_another_way_gives_way_to_the_time(tmp_path):
    def change(made: Dataset, number: int, frame: int) -> Dataset:
        made.ImageIndex = number + 1  # starts anew in every frame
        return made

    meant = write_series(tmp_path / "s", picture((6, 5, 4, 3)), change=change)
    np.testing.assert_allclose(open_image(tmp_path / "s").frame(2), meant[..., 2], rtol=1e-14)


@pytest.mark.parametrize("write", [write_enhanced, write_tomogram], ids=["enhanced PET", "nuclear medicine"])
def test_multi_frame_file_that_gives_its_geometry_is_read(tmp_path, write):
    meant = write(tmp_path / "s", picture())
    image = open_image(tmp_path / "s")
    np.testing.assert_allclose(image.frame(0), meant, rtol=1e-14)
    expected = [[-2.0, 0, 0, 31.0], [0, -2.5, 0, 17.0], [0, 0, 3.0, 40.0], [0, 0, 0, 1]]
    np.testing.assert_allclose(image.source.affine, expected, atol=1e-9)


def test_multi_frame_file_with_time_frames_is_read(tmp_path):
    meant = write_enhanced(tmp_path / "s", picture((6, 5, 4, 3)))
    image = open_image(tmp_path / "s")
    assert image.frames == 3
    for index, frame in enumerate(image.iter_frames()):
        np.testing.assert_allclose(frame, meant[..., index], rtol=1e-14)
    assert image.sidecar_fields["FrameDuration"] == [2.0, 2.0, 2.0]


def test_tomogram_with_falling_slices_is_put_in_order(tmp_path):
    meant = write_tomogram(tmp_path / "s", picture(), alter=lambda made: setattr(made, "SpacingBetweenSlices", -3.0))
    image = open_image(tmp_path / "s")
    np.testing.assert_allclose(image.frame(0), meant[:, :, ::-1], rtol=1e-14)
    assert image.source.affine[2, 3] == pytest.approx(40.0 - 6 * 3.0)


def compressed(syntax, **options):
    def change(made: Dataset, number: int, frame: int) -> Dataset:
        made.compress(syntax, **options)
        return made

    return change


def test_run_length_compression_is_read(tmp_path):
    meant = write_series(tmp_path / "s", picture(), change=compressed(RLELossless))
    np.testing.assert_allclose(open_image(tmp_path / "s").frame(0), meant, rtol=1e-14)


def test_values_that_break_the_rules_are_not_quoted(tmp_path, caplog, capfd):
    # The header's reader warns of values that its rules forbid, and quotes them; warnings are errors in the tests.
    def change(made: Dataset, number: int, frame: int) -> Dataset:
        made.NumberOfFrames = 0  # the pixels' reader says that it takes this for 1
        return made

    meant = write_series(tmp_path / "s", picture(), change=change)
    for number, file in enumerate((tmp_path / "s").iterdir()):
        instance = str(pydicom.dcmread(file).SOPInstanceUID).encode()
        planted = f"Plantedname{number}".ljust(len(instance), "x").encode()
        file.write_bytes(file.read_bytes().replace(instance, planted))
    np.testing.assert_allclose(open_image(tmp_path / "s").frame(0), meant, rtol=1e-14)
    assert_nothing_planted(caplog.text + "".join(capfd.readouterr()))


def test_records_and_images_hold_allowed_fields_only(tmp_path):
    write_series(tmp_path / "s", picture((16, 15, 8, 2)))
    image = open_image(tmp_path / "s")
    assert image.source.facts == {
        "Modality": "PT",
        "ManufacturerModelName": "Invented 3",
        "Units": "BQML",
        "ReconstructionMethod": "OSEM 4i8s",
        "ConvolutionKernel": "Gauss 4.0",
        "CorrectedImage": ["DECY", "ATTN", "SCAT"],
        "DecayCorrection": "START",
        "SliceThickness": 6.0,
        "PixelSpacing": [2.0, 2.0],
        "RadionuclideHalfLife": 6586.2,
        "Radionuclide": "^18^Fluorine",
    }
    intake = take_in_image(tmp_path / "s", name=NAME, item="scan", key="k")
    assert intake["holds"] == []
    assert intake["sha256"] == folder_sha256(tmp_path / "s")
    out, record = tmp_path / "h.nii", tmp_path / "h.json"
    harmonise_scan(tmp_path / "s", in_plane_mm=5.0, axial_mm=6.0, out=out, record=record)
    assert json.loads(record.read_text())["Units"] == "Bq/mL"
    texts = [json.dumps(intake), record.read_text(), repr(image.source.facts), out.read_bytes().decode("latin-1")]
    for text in texts:
        assert_nothing_planted(text)


def test_harmonised_folder_is_a_nifti_with_the_same_geometry(tmp_path):
    values = picture((16, 15, 8))
    meant = write_series(tmp_path / "s", values, directions=SAGITTAL, between_columns_mm=2.0, between_rows_mm=2.5)
    done = harmonise_scan(
        tmp_path / "s", in_plane_mm=0.0, axial_mm=0.0, out=tmp_path / "h.nii.gz", record=tmp_path / "h.json"
    )
    image = nib.load(tmp_path / "h.nii.gz")
    # Without a kernel the values come through in single precision.
    np.testing.assert_array_equal(image.get_fdata(dtype=np.float32), meant.astype(np.float32))
    # Rows run to the back (negative y), columns to the feet; slices along (0,1,0) x (0,0,-1) = (-1,0,0), to the right.
    expected = [[0, 0, 3.0, 31.0], [-2.0, 0, 0, 17.0], [0, -2.5, 0, 40.0], [0, 0, 0, 1]]
    np.testing.assert_allclose(image.affine, expected, atol=1e-5)  # NIfTI keeps single precision
    assert (image.header["qform_code"], image.header["sform_code"]) == (1, 1)
    np.testing.assert_allclose(image.get_qform(), image.get_sform(), atol=1e-5)
    assert done["Evenblur"]["input"]["sha256"] == folder_sha256(tmp_path / "s")
    # The copy measures and harmonises like the folder.
    again = harmonise_scan(
        tmp_path / "h.nii.gz", in_plane_mm=6.0, axial_mm=5.0, out=tmp_path / "b.nii", record=tmp_path / "b.json"
    )
    ours = harmonise_scan(
        tmp_path / "s", in_plane_mm=6.0, axial_mm=5.0, out=tmp_path / "a.nii", record=tmp_path / "a.json"
    )
    assert ours["Evenblur"]["output"] == again["Evenblur"]["output"]


def test_changed_series_is_noticed(tmp_path):
    write_series(tmp_path / "s", picture())
    with pytest.raises(InputError, match="changed during the run"):
        harmonise_scan(
            tmp_path / "s",
            in_plane_mm=5,
            axial_mm=5,
            out=tmp_path / "h.nii",
            record=tmp_path / "h.json",
            expected_sha256="0" * 64,
        )


def test_header_reader_is_loaded_for_a_folder_only(tmp_path):
    nib.save(nib.Nifti1Image(np.ones((4, 4, 4), np.float32), np.eye(4)), tmp_path / "a.nii")
    code = (
        "import sys; from pathlib import Path; from evenblur.images.harmonise import harmonise_scan as h;"
        "h(Path('a.nii'), in_plane_mm=2, axial_mm=2, out=Path('b.nii'), record=Path('b.json'));"
        "sys.exit('pydicom' in sys.modules)"
    )
    done = subprocess.run(
        [sys.executable, "-c", code], cwd=tmp_path, env={"PYTHONPATH": str(SCRIPTS)}, capture_output=True, check=False
    )
    assert (done.returncode, done.stderr) == (0, b"")


def test_nifti_with_a_dicom_header_inside_is_read_and_that_header_stays_closed(tmp_path):
    image = nib.Nifti1Image(np.ones((4, 4, 4), np.float32), np.eye(4))
    image.header.extensions.append(nib.nifti1.Nifti1Extension(2, b"\x10\x00\x10\x00PN\x04\x00Plan"))
    nib.save(image, tmp_path / "a.nii")
    code = (
        "import sys; from pathlib import Path; from evenblur.images.reading import open_image;"
        "print(open_image(Path('a.nii')).frame(0).sum()); sys.exit('pydicom' in sys.modules)"
    )
    environment = {"PYTHONPATH": str(SCRIPTS)}
    done = subprocess.run(
        [sys.executable, "-c", code], cwd=tmp_path, env=environment, capture_output=True, text=True, check=False
    )
    assert (done.returncode, done.stdout, done.stderr) == (0, "64.0\n", "")
