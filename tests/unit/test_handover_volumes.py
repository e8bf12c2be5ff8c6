"""Phantoms are packed as voxels and grid alone: nothing of any header, and the voxels that were measured."""

import hashlib
import io
import shutil
from pathlib import Path

import nibabel as nib
import numpy as np
import pytest

import dicom_simulation as dicom
from evenblur.check.fourier import smooth
from evenblur.check.volumes import UnreadableError, Volume, read_series
from evenblur.errors import InputError
from evenblur.handover.volumes import pack_volume
from evenblur.images.digests import image_sha256
from evenblur.images.harmonise import harmonise_scan
from evenblur.intake import take_in_image

# Source: a PET volume in ECAT 7 that the nibabel package ships for its own tests.
ECAT = Path(nib.__file__).parent / "tests" / "data" / "tinypet.v"


def packed(image, tmp_path):
    """The volume as packed, after its intake; it must hold the voxels of the intake record."""
    seen = take_in_image(image, name=image.name, item="phantom", key="p")
    out = tmp_path / "packed.nii.gz"
    pack_volume(image, name=image.name, out=out, sha256=seen["sha256"], voxels_sha256=seen["voxels_sha256"])
    digest = hashlib.sha256()
    for frame in Volume(out).read():
        digest.update(frame.astype("<f4").tobytes(order="F"))
    assert digest.hexdigest() == seen["voxels_sha256"]
    return nib.load(out)


def test_a_dicom_series_is_packed_without_its_headers(tmp_path):
    values = dicom.write_series(tmp_path / "series", dicom.picture())
    image = packed(tmp_path / "series", tmp_path)
    np.testing.assert_allclose(image.get_fdata(), values, rtol=1e-6)
    dicom.assert_nothing_planted(image.to_bytes().decode("latin-1"))
    assert len(list(tmp_path.iterdir())) == 2


def test_an_ecat_file_is_packed_without_its_header(tmp_path):
    data = bytearray(ECAT.read_bytes())
    # The main header's fields patient_id (16 bytes) and patient_name (32 bytes) start at byte 166 and 182.
    data[166:182], data[182:214] = b"PLANTED77".ljust(16, b"\0"), b"Quayle^Imogen".ljust(32, b"\0")
    (tmp_path / "phantom.v").write_bytes(data)
    kind, stream = nib.ecat.EcatImage, io.BytesIO(bytes(data))
    header = kind.from_file_map(kind.make_file_map({"header": stream, "image": stream})).header
    assert header["patient_name"].item().startswith(b"Quayle"), "the name stands where a reader finds it"
    content = packed(tmp_path / "phantom.v", tmp_path).to_bytes()
    assert b"Quayle" not in content
    assert b"PLANTED77" not in content


def test_a_nifti_file_is_packed_without_its_texts_and_extensions(tmp_path):
    scanned = nib.Nifti1Image(np.arange(24, dtype=np.int16).reshape(2, 3, 4), np.diag([2.0, 2.0, 3.0, 1.0]))
    for field in ("descrip", "aux_file", "intent_name", "db_name"):
        scanned.header[field] = b"Quayle"
    scanned.header.extensions.append(nib.nifti1.Nifti1Extension("comment", b"Quayle"))
    nib.save(scanned, tmp_path / "p.nii")
    image = packed(tmp_path / "p.nii", tmp_path)
    assert b"Quayle" not in image.to_bytes()
    np.testing.assert_array_equal(image.get_fdata(), scanned.get_fdata())
    np.testing.assert_array_equal(image.affine, scanned.affine)


def test_a_phantom_that_changed_since_its_intake_is_not_packed(tmp_path):
    nib.save(nib.Nifti1Image(np.ones((3, 3, 3), np.float32), np.eye(4)), tmp_path / "p.nii")
    sha256 = image_sha256(tmp_path / "p.nii")
    for wrong in ({"sha256": "0" * 64}, {"sha256": sha256, "voxels_sha256": "0" * 64}):
        with pytest.raises(InputError, match="changed during the run"):
            pack_volume(tmp_path / "p.nii", name="p.nii", out=tmp_path / "out.nii.gz", **wrong)
    assert [path.name for path in tmp_path.iterdir()] == ["p.nii"]


def test_the_other_route_reads_a_dicom_series_as_the_engine_does(tmp_path):
    dicom.write_series(tmp_path / "series", dicom.picture((24, 22, 8)))
    (tmp_path / "series" / "README.txt").write_text("a note")
    out = tmp_path / "h.nii.gz"
    harmonise_scan(tmp_path / "series", in_plane_mm=6.0, axial_mm=5.0, out=out, record=tmp_path / "h.json")
    found = Volume(out)
    widths = [5.0 if axis == found.axial else 6.0 for axis in range(3)]
    sigma = tuple(w / (2 * np.sqrt(2 * np.log(2))) / s for w, s in zip(widths, found.voxel_mm, strict=True))
    (before,) = read_series(tmp_path / "series", found)
    (after,) = found.read()
    again = smooth(before, sigma)
    assert np.max(np.abs(again - after)) < 1e-5 * np.max(again)
    # One slice less, and it is no longer the series that was smoothed.
    shutil.move(next(iter(sorted((tmp_path / "series").glob("*[!t]")))), tmp_path / "aside")
    with pytest.raises(UnreadableError):
        list(read_series(tmp_path / "series", found))


def test_the_other_route_agrees_with_the_closed_form():
    # Waves of the half-sample-symmetric cosine transform are multiplied by exp(-(sigma w)^2 / 2) and nothing else.
    size, order, sigma = 40, 7, 1.7
    omega = np.pi * order / size
    wave = np.cos(omega * (np.arange(size) + 0.5))
    found = smooth(np.broadcast_to(wave[:, None, None], (size, 3, 3)).copy(), (sigma, 0.0, 2.0))
    np.testing.assert_allclose(found[:, 1, 1], wave * np.exp(-((sigma * omega) ** 2) / 2), atol=1e-12)


def test_voxels_without_a_value_count_for_nothing_on_the_other_route():
    volume = np.full((9, 9, 9), 3.0)
    volume[4, 4, 4] = np.nan
    found = smooth(volume, (1.0, 1.0, 1.0))
    assert np.isnan(found[4, 4, 4])
    np.testing.assert_allclose(found[~np.isnan(found)], 3.0)
