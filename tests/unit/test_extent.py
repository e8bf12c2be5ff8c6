"""How many voxels an image holds: as nibabel reads it, or a bound."""

import gzip

import nibabel as nib
import numpy as np
import pytest

from evenblur.images.extent import Extent, image_extent

SHAPES = [(7, 5, 3), (7, 5, 3, 4)]
KINDS = [nib.Nifti1Image, nib.Nifti2Image, nib.Spm99AnalyzeImage]


@pytest.mark.parametrize("shape", SHAPES)
@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("packed", ["", ".gz"])
def test_headers_are_read_as_nibabel_writes_them(tmp_path, shape, kind, packed):
    ending = ".hdr" if kind is nib.Spm99AnalyzeImage else ".nii"
    path = tmp_path / f"a{ending}{packed}"
    nib.save(kind(np.zeros(shape, np.int16), np.eye(4)), path)
    assert image_extent(path) == Extent(105, shape[3] if len(shape) == 4 else 1)


def test_the_other_byte_order_is_read(tmp_path):
    path = tmp_path / "a.nii"
    header = nib.Nifti1Header(endianness=">")
    header.set_data_shape((7, 5, 3))
    path.write_bytes(header.binaryblock + bytes(4))
    assert image_extent(path) == Extent(105, 1)


@pytest.mark.parametrize("content", [b"", b"short", b"\x5c\x01\x00\x00" + bytes(340), bytes(600)])
def test_what_is_no_header_is_bounded_by_its_size(tmp_path, content):
    path = tmp_path / "a.v"
    path.write_bytes(content)
    assert image_extent(path) == Extent(len(content) // 2, 1)


def test_a_damaged_compressed_file_is_bounded(tmp_path):
    path = tmp_path / "a.nii.gz"
    path.write_bytes(gzip.compress(bytes(1000))[:-20])
    assert image_extent(path).frames == 1


def test_a_folder_is_bounded_by_all_its_files(tmp_path):
    (tmp_path / "series" / "part").mkdir(parents=True)
    for name in ("a", "part/b"):
        (tmp_path / "series" / name).write_bytes(bytes(1000))
    assert image_extent(tmp_path / "series") == Extent(1000, 1)


def test_a_missing_image_is_an_error(tmp_path):
    with pytest.raises(FileNotFoundError):
        image_extent(tmp_path / "a.nii")
