"""Images made to hurt whoever opens them: bombs, circles, files that point elsewhere, files that run code when loaded.

Each function writes one into a folder and gives the path that a table would name. They are small on disk.
"""

import bz2
import io
import os
import pickle
import struct
import warnings
import zlib
from collections.abc import Callable
from functools import partial
from pathlib import Path

import nibabel as nib
import numpy as np
import pydicom
from isal import isal_zlib
from pydicom.dataset import Dataset
from pydicom.encaps import encapsulate
from pydicom.uid import DeflatedExplicitVRLittleEndian, JPEG2000Lossless, RLELossless

from dicom_simulation import PET_STORAGE, add_picture, header, picture, write_series

MIB = 1 << 20


def nifti1(shape: tuple[int, ...], *, code: int = 2, bits: int = 8, offset: float = 352.0) -> bytearray:
    """A NIfTI-1 header of its own making, 352 bytes: voxels of 2 mm, `code` 2 is uint8."""
    made = bytearray(352)
    struct.pack_into("<i", made, 0, 348)
    lengths = [len(shape), *shape, *[1] * (7 - len(shape))]
    struct.pack_into("<8h", made, 40, *lengths)
    struct.pack_into("<2h", made, 70, code, bits)
    struct.pack_into("<8f", made, 76, 1, 2, 2, 2, 1, 1, 1, 1)
    struct.pack_into("<3f", made, 108, offset, 1.0, 0.0)
    made[123] = 10
    struct.pack_into("<2h", made, 252, 0, 1)
    for row in range(3):
        struct.pack_into("<f", made, 280 + 20 * row, 2.0)
    made[344:348] = b"n+1\0"
    return made


def nifti2(shape: tuple[int, ...]) -> bytearray:
    """A NIfTI-2 header that claims a shape of 64-bit lengths."""
    made = bytearray(544)
    struct.pack_into("<i", made, 0, 540)
    made[4:12] = b"n+2\0\r\n\x1a\n"
    struct.pack_into("<2h", made, 12, 2, 8)
    struct.pack_into("<8q", made, 16, len(shape), *shape, *[1] * (7 - len(shape)))
    struct.pack_into("<8d", made, 104, 1, 2, 2, 2, 1, 1, 1, 1)
    struct.pack_into("<q", made, 168, 544)
    struct.pack_into("<2d", made, 176, 1.0, 0.0)
    struct.pack_into("<i", made, 348, 1)
    for row in range(3):
        struct.pack_into("<d", made, 400 + 40 * row, 2.0)
    return made


def write_gzip(path: Path, head: bytes, *, value: int = 0, count: int) -> Path:
    """A gzip file of a head and `count` equal bytes (whole MiB), of one packed piece laid down again and again."""
    piece = bytes([value]) * MIB
    first, repeated = zlib.compressobj(9, zlib.DEFLATED, -15), zlib.compressobj(9, zlib.DEFLATED, -15)
    packed = repeated.compress(piece) + repeated.flush(zlib.Z_FULL_FLUSH)
    checksum = isal_zlib.crc32(head)
    with path.open("wb") as stream:
        stream.write(b"\x1f\x8b\x08" + bytes(6) + b"\xff")
        stream.write(first.compress(head) + first.flush(zlib.Z_FULL_FLUSH))
        for _ in range(count // MIB):
            stream.write(packed)
            checksum = isal_zlib.crc32(piece, checksum)
        stream.write(zlib.compressobj(9, zlib.DEFLATED, -15).flush())
        stream.write(struct.pack("<2I", checksum, (len(head) + count // MIB * MIB) & 0xFFFFFFFF))
    return path


def claims_of_a_header(folder: Path) -> Path:
    path = folder / "a.nii"
    path.write_bytes(nifti1((3000, 3000, 3000)) + bytes(100))
    return path


def claims_of_a_long_header(folder: Path) -> Path:
    path = folder / "a.nii"
    path.write_bytes(nifti2((1 << 40, 1 << 40, 1 << 40)) + bytes(100))
    return path


def claims_of_frames(folder: Path) -> Path:
    return write_gzip(folder / "a.nii.gz", nifti1((200, 200, 200, 32000)), count=8 * MIB)


def packed_frame(folder: Path) -> Path:
    return write_gzip(folder / "a.nii.gz", nifti1((640, 640, 640)), value=1, count=640**3)


def packed_frame_by_bzip(folder: Path) -> Path:
    path = folder / "a.nii.bz2"
    packer = bz2.BZ2Compressor()
    with path.open("wb") as stream:
        stream.write(packer.compress(bytes(nifti1((640, 640, 640)))))
        for _ in range(40):
            stream.write(packer.compress(bytes(MIB)))
        stream.write(packer.flush())
    return path


def packed_bytes_behind_the_end(folder: Path) -> Path:
    return write_gzip(folder / "a.nii.gz", nifti1((8, 8, 8)) + b"\1" * 512, count=2048 * MIB)


def packed_offset(folder: Path) -> Path:
    return write_gzip(folder / "a.nii.gz", nifti1((8, 8, 8), offset=float(1 << 31)), value=1, count=2048 * MIB)


def packed_extension(folder: Path) -> Path:
    head = nifti1((8, 8, 8), offset=float((1 << 31) - 128))
    head[348] = 1
    return write_gzip(folder / "a.nii.gz", bytes(head) + struct.pack("<2i", (1 << 31) - 1024, 6), count=2048 * MIB)


def packed_extension_of_a_pair(folder: Path) -> Path:
    head = nifti1((8, 8, 8), offset=0.0)
    head[344:348] = b"ni1\0"
    head[348] = 1
    (folder / "a.img").write_bytes(b"\1" * 512)
    return write_gzip(folder / "a.hdr.gz", bytes(head) + struct.pack("<2i", (1 << 31) - 1024, 6), count=2048 * MIB)


def packed_mgh(folder: Path) -> Path:
    head = struct.pack(">7i", 1, 30000, 30000, 30000, 1, 0, 0) + bytes(256)
    return write_gzip(folder / "a.mgz", head, count=512 * MIB)


def packed_minc(folder: Path) -> Path:
    return write_gzip(folder / "a.mnc.gz", b"CDF\1" + bytes(28), count=512 * MIB)


def minc_with_outside_links(folder: Path) -> Path:
    path = folder / "a.mnc"
    path.write_bytes(b"\x89HDF\r\n\x1a\n" + bytes(2048))
    return path


def matrix_beside_an_image(folder: Path) -> Path:
    from scipy.io import savemat

    image = nib.Spm99AnalyzeImage(np.ones((8, 8, 8), np.int16), np.eye(4))
    nib.save(image, folder / "a.img")
    savemat(folder / "a.mat", {"mat": np.zeros((5000, 5000), np.float32)}, do_compression=True)
    return folder / "a.img"


def pair_without_its_voxels(folder: Path) -> Path:
    head = nifti1((8, 8, 8), offset=0.0)
    head[344:348] = b"ni1\0"
    (folder / "a.hdr").write_bytes(head)
    (folder / "a.img").symlink_to("/dev/zero")
    return folder / "a.hdr"


def text_header_without_an_end(folder: Path) -> Path:
    (folder / "a+orig.BRIK").write_bytes(bytes(512))
    write_gzip(folder / "a+orig.HEAD.gz", b"type = string-attribute\n", count=512 * MIB)
    with (folder / "a+orig.HEAD").open("wb") as stream:
        stream.truncate(512 * MIB)  # a hole: it takes no room on the disk
    return folder / "a+orig.BRIK"


def parameter_file_without_an_end(folder: Path) -> Path:
    (folder / "a.REC").write_bytes(bytes(512))
    with (folder / "a.PAR").open("wb") as stream:
        stream.write(b"# === DATA DESCRIPTION FILE ===\n")
        stream.truncate(512 * MIB)
    return folder / "a.PAR"


LAUGHS = (
    '<!DOCTYPE g [<!ENTITY a0 "ha">'
    + "".join(f'<!ENTITY a{k} "{f"&a{k - 1};" * 10}">' for k in range(1, 12))
    + ' <!ENTITY out SYSTEM "file:///etc/passwd">]>'
)


def surface_with_entities(folder: Path) -> Path:
    path = folder / "a.gii"
    path.write_text(f'<?xml version="1.0"?>{LAUGHS}<GIFTI Version="1.0"><MetaData>&a11;&out;</MetaData></GIFTI>')
    return path


def surface_that_names_a_file(folder: Path) -> Path:
    path = folder / "a.gii"
    data = (
        '<DataArray Intent="NIFTI_INTENT_POINTSET" DataType="NIFTI_TYPE_UINT8" Dimensionality="1" Dim0="64" '
        'ArrayIndexingOrder="RowMajorOrder" Encoding="ExternalFileBinary" Endian="LittleEndian" '
        'ExternalFileName="/etc/passwd" ExternalFileOffset="0"><Data></Data></DataArray>'
    )
    path.write_text(f'<?xml version="1.0"?><GIFTI Version="1.0" NumberOfDataArrays="1">{data}</GIFTI>')
    return path


def table_with_entities(folder: Path) -> Path:
    xml = f'<?xml version="1.0"?>{LAUGHS}<CIFTI Version="2"><Matrix>&a11;</Matrix></CIFTI>'.encode()
    size = (len(xml) + 8 + 15) // 16 * 16
    head = nifti2((1, 1, 1, 1, 4, 4))
    struct.pack_into("<i", head, 504, 3006)
    struct.pack_into("<q", head, 168, 544 + size)
    head[540] = 1
    path = folder / "a.dconn.nii"
    path.write_bytes(bytes(head) + struct.pack("<2i", size, 32) + xml.ljust(size - 8, b"\0") + bytes(16))
    return path


def ecat() -> bytearray:
    """The ECAT 7 volume that the nibabel package ships for its own tests."""
    return bytearray((Path(nib.__file__).parent / "tests" / "data" / "tinypet.v").read_bytes())


def ecat_in_a_circle(folder: Path) -> Path:
    data = ecat()
    data += bytes(-len(data) % 512 + 1024)
    block = len(data) // 512  # the last block, counted from 1
    struct.pack_into(">4i", data, 512, 30, block, 0, 1)
    struct.pack_into(">4i", data, (block - 1) * 512, 30, block, 0, 1)
    (folder / "a.v").write_bytes(data)
    return folder / "a.v"


def ecat_without_an_end(folder: Path) -> Path:
    path = folder / "a.v"
    data = ecat()
    struct.pack_into(">3h", data, 1024 + 4, 2000, 2000, 2000)
    path.write_bytes(data)
    with path.open("r+b") as stream:
        stream.truncate(600 * MIB)
    return path


class Planted:
    """Leaves a mark when it is unpickled."""

    def __init__(self, mark: Path) -> None:
        self.mark = mark

    def __reduce__(self) -> tuple[Callable[..., object], tuple[object, ...]]:
        return (Path.touch, (self.mark,))


def pickles(folder: Path, name: str) -> Path:
    """A file that touches `executed` beside it where anybody unpickles it."""
    planted = Planted(folder / "executed")
    if name.endswith(".npz"):
        np.savez(folder / name, a=np.array([planted], dtype=object))
    elif name.endswith(".npy"):
        np.save(folder / name, np.array([planted], dtype=object), allow_pickle=True)
    else:
        (folder / name).write_bytes(pickle.dumps(planted))
    return folder / name


def pipe(folder: Path) -> Path:
    os.mkfifo(folder / "a.nii")
    return folder / "a.nii"


def device(folder: Path) -> Path:
    (folder / "a.nii").symlink_to("/dev/zero")
    return folder / "a.nii"


def link_in_a_circle(folder: Path) -> Path:
    (folder / "a.nii").symlink_to("b.nii")
    (folder / "b.nii").symlink_to("a.nii")
    return folder / "a.nii"


# --- sidecars


def with_sidecar(folder: Path, content: bytes) -> Path:
    """A sound small image with a sidecar."""
    image = nib.Nifti1Image(np.arange(512, dtype=np.float32).reshape(8, 8, 8), np.diag([2.0, 2, 2, 1]))
    nib.save(image, folder / "a.nii")
    (folder / "a.json").write_bytes(content)
    return folder / "a.nii"


SIDECARS = {
    "nested beyond measure": b'{"Units": ' + b"[" * 200_000 + b"]" * 200_000 + b"}",
    "nested somewhat": b'{"FrameDuration": ' + b"[" * 900 + b"]" * 900 + b"}",
    "with a giant integer": b'{"FrameDuration": [' + b"9" * 4000 + b"]}",
    "with a number of too many digits": b'{"FrameDuration": [' + b"9" * 100_000 + b"]}",
    "with half a character": b'{"Units": "\\ud800", "TracerName": "\\udfff"}',
    "with control characters": b'{"Units": "Bq/mL\\u0000\\u001b[2J"}',
    "with no number": b'{"FrameDuration": [NaN, Infinity, 1e999]}',
    "with a mapping": b'{"Units": {"a": {"b": 1}}}',
    "with a long text": b'{"Units": "' + b"x" * (3 * MIB) + b'"}',
    "that is no JSON": b"\xff\xfe\x00{",
    "that is a list": b"[1, 2]",
    "empty": b"",
}


def sidecar_pipe(folder: Path) -> Path:
    path = with_sidecar(folder, b"")
    (folder / "a.json").unlink()
    os.mkfifo(folder / "a.json")
    return path


# --- DICOM


def dicom_nested(folder: Path) -> Path:
    """Sequences in sequences, each of undefined length, in a field that is read."""
    write_series(folder / "s", picture())
    opening = b"\x54\x00\x16\x00SQ\0\0\xff\xff\xff\xff" + b"\xfe\xff\x00\xe0\xff\xff\xff\xff"
    for file in (folder / "s").iterdir():
        whole = file.read_bytes()
        at = whole.index(b"\x54\x00\x16\x00SQ")
        file.write_bytes(whole[:at] + opening * 20_000)
    return folder / "s"


def dicom_long_element(folder: Path) -> Path:
    """A field that claims four gigabytes."""
    write_series(folder / "s", picture())
    for file in (folder / "s").iterdir():
        whole = file.read_bytes()
        at = whole.index(b"\x54\x00\x16\x00SQ")
        file.write_bytes(whole[:at] + b"\x54\x00\x16\x00UN\0\0\xf0\xff\xff\xff" + whole[at:])
    return folder / "s"


def dicom_deflated(folder: Path) -> Path:
    folder = folder / "s"
    folder.mkdir()
    made = header(PET_STORAGE, "1.2.3")
    made.file_meta.TransferSyntaxUID = DeflatedExplicitVRLittleEndian
    add_picture(made, np.zeros((8, 8), np.int16))
    stream = io.BytesIO()
    made.save_as(stream, enforce_file_format=True)
    head = stream.getvalue()
    packer = zlib.compressobj(9, zlib.DEFLATED, -15)
    body = packer.compress(b"\x10\x00\x10\x00UN\0\0\xf0\xff\xff\xff")
    body += b"".join(packer.compress(bytes(MIB)) for _ in range(512)) + packer.flush()
    meta_end = 144 + struct.unpack("<I", head[140:144])[0]  # the first field tells the length of the rest
    (folder / "IM1").write_bytes(head[:meta_end] + body)
    return folder


def _packed_slices(folder: Path, syntax: pydicom.uid.UID, picture_bytes: bytes, side: int, *, slices: int = 3) -> Path:
    folder = folder / "s"

    def change(made: Dataset, number: int, frame: int) -> Dataset:
        made.Rows = made.Columns = side
        made.file_meta.TransferSyntaxUID = syntax
        made.PixelData = encapsulate([picture_bytes])
        made["PixelData"].is_undefined_length = True
        return made

    write_series(folder, np.ones((4, 4, slices)), change=change)
    return folder


def dicom_run_lengths(folder: Path) -> Path:
    """Slices whose run lengths unpack to 8000 x 8000."""
    runs = b"\x81\x01" * (8000 * 8000 // 128)
    return _packed_slices(folder, RLELossless, struct.pack("<16I", 2, 64, 64 + len(runs), *[0] * 13) + runs * 2, 8000)


def dicom_many_run_lengths(folder: Path) -> Path:
    """Many slices of 512 x 512, small ones each, that unpack to 128 million voxels."""
    runs = b"\x81\x01" * (512 * 512 // 128)
    packed = struct.pack("<16I", 2, 64, 64 + len(runs), *[0] * 13) + runs * 2
    return _packed_slices(folder, RLELossless, packed, 512, slices=512)


def dicom_run_lengths_beyond_the_picture(folder: Path) -> Path:
    """Slices of 8 x 8 whose run lengths would unpack to three gigabytes."""
    runs = b"\x81\x01" * (24 << 20)
    return _packed_slices(folder, RLELossless, struct.pack("<16I", 2, 64, 64 + 128, *[0] * 13) + runs, 8)


def dicom_wavelets(folder: Path) -> Path:
    """Slices of a constant, 8000 x 8000, in a few kilobytes of JPEG 2000."""
    from PIL import Image

    stream = io.BytesIO()
    Image.new("I;16", (8000, 8000)).save(stream, "JPEG2000", no_jp2=True)
    return _packed_slices(folder, JPEG2000Lossless, stream.getvalue(), 8000)


def dicom_directory(folder: Path) -> Path:
    """A file set whose directory names files elsewhere, under a name that is not passed over."""
    folder = folder / "s"
    folder.mkdir()
    record = Dataset()
    record.DirectoryRecordType = "IMAGE"
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # such names are not allowed there
        record.ReferencedFileID = ["..", "..", "etc", "passwd"]
    made = header("1.2.840.10008.1.3.10", "1.2.3")
    made.DirectoryRecordSequence = [record]
    made.save_as(folder / "INDEX", enforce_file_format=True)
    return folder


def dicom_links_out(folder: Path) -> Path:
    """A series with a link to a file of the system, a link to nowhere, a pipe and a name that is no UTF-8."""
    write_series(folder / "s", picture())
    (folder / "s" / "IM99998").symlink_to("/etc/passwd")
    (folder / "s" / "nowhere").symlink_to("/no such place")
    os.mkfifo(folder / "s" / "pipe")
    (folder / "s" / os.fsdecode(b"\xff\xfe")).write_bytes(b"no picture")
    return folder / "s"


BOMBS: dict[str, Callable[[Path], Path]] = {
    made.__name__: made
    for made in (
        claims_of_a_header,
        claims_of_a_long_header,
        claims_of_frames,
        packed_frame,
        packed_frame_by_bzip,
        packed_bytes_behind_the_end,
        packed_offset,
        packed_extension,
        packed_extension_of_a_pair,
        packed_mgh,
        packed_minc,
        minc_with_outside_links,
        matrix_beside_an_image,
        pair_without_its_voxels,
        text_header_without_an_end,
        parameter_file_without_an_end,
        surface_with_entities,
        surface_that_names_a_file,
        table_with_entities,
        ecat_in_a_circle,
        ecat_without_an_end,
        pipe,
        device,
        link_in_a_circle,
        dicom_nested,
        dicom_long_element,
        dicom_deflated,
        dicom_run_lengths,
        dicom_many_run_lengths,
        dicom_run_lengths_beyond_the_picture,
        dicom_wavelets,
        dicom_directory,
        dicom_links_out,
    )
} | {
    f"pickled_{name.replace('.', '_')}": partial(pickles, name=name)
    for name in ("a.npy", "a.npz", "a.nii", "a.mgh", "a.mnc", "a.v", "a.pkl")
}
"""By name, what must come to nothing: held, nothing executed, no more memory than the limit."""

BESIDE: dict[str, Callable[[Path], Path]] = {
    f"sidecar {name}": partial(with_sidecar, content=content) for name, content in SIDECARS.items()
} | {"sidecar that is a pipe": sidecar_pipe}
"""By name, sound images with a sidecar that must count as none, or as one without the field."""
