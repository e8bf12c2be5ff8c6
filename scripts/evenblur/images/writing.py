"""Write a harmonised image: float32 NIfTI frame by frame, with the input's geometry and nothing else of its header."""

import hashlib
import os
from pathlib import Path
from types import TracebackType
from typing import Any, BinaryIO, cast

import numpy as np
from isal import isal_zlib

from evenblur.images.nibabel_alone import nib
from evenblur.images.reading import Image

# What a header says about geometry and time. Free text (descrip, aux_file, intent_name, db_name), display ranges,
# acquisition details and header extensions stay behind: they may name a person, or no longer hold.
_KEPT_FIELDS = (
    "dim",
    "pixdim",
    "xyzt_units",
    "toffset",
    "qform_code",
    "sform_code",
    "quatern_b",
    "quatern_c",
    "quatern_d",
    "qoffset_x",
    "qoffset_y",
    "qoffset_z",
    "srow_x",
    "srow_y",
    "srow_z",
)

MARK = b"harmonised in resolution by Evenblur"
"""What the header of every harmonised image says of itself, so that none is smoothed again when its record is lost."""

# A gzip header without time, name or system: the same picture gives the same bytes.
_GZIP_HEADER = bytes([0x1F, 0x8B, 8, 0, 0, 0, 0, 0, 0, 255])
# ISA-L's levels differ by a percent in size on float32 images; the first is the fastest.
_GZIP_LEVEL = 1
_PIECE_BYTES = 1 << 20


def output_header(image: Image, *, mark: bytes = b"") -> Any:
    """Header of a written image: geometry, units and time step of the input, float32, scale 1.

    A NIfTI header's fields are taken as they stand, so that not even their rounding changes; NIfTI-2 stays NIfTI-2.
    For other formats the affine is written as the scanner's (sform and qform code 1), lengths in mm.

    Parameters
    ----------
    image
        The opened input.
    mark
        What the header says of the image: `MARK` for a harmonised one.

    Returns
    -------
    nibabel.Nifti1Header or nibabel.Nifti2Header
        Little-endian header of a single file.

    >>> import nibabel
    >>> from evenblur.images.grid import grid_from_affine
    >>> source = nibabel.Nifti1Image(np.zeros((2, 2, 2), np.int16), np.eye(4))
    >>> source.header["descrip"] = b"a name"
    >>> header = output_header(Image("a.nii", source, grid_from_affine(np.eye(4), (2, 2, 2)), 1))
    >>> header["descrip"].item(), str(header.get_data_dtype())
    (b'', 'float32')
    """
    source = image.source
    if isinstance(source, nib.Nifti1Pair):
        kind = nib.Nifti2Header if isinstance(source.header, nib.Nifti2Header) else nib.Nifti1Header
        header = kind(endianness="<")
        for field in _KEPT_FIELDS:
            header[field] = source.header[field]
    else:
        header = nib.Nifti1Header(endianness="<")
        header.set_data_shape(source.shape)
        header.set_xyzt_units(xyz="mm")
        header.set_qform(source.affine, code=1)
        header.set_sform(source.affine, code=1)
    header["descrip"] = mark
    header.set_data_dtype(np.float32)
    header["scl_slope"], header["scl_inter"] = 1.0, 0.0
    header["vox_offset"] = int(header["sizeof_hdr"]) + 4
    header["magic"] = header.single_magic
    return header


def bears_mark(image: Image) -> bool:
    """Whether an image's header says that this program harmonised it."""
    if not isinstance(image.source, nib.Nifti1Pair):
        return False
    return bytes(image.source.header["descrip"].item()).startswith(MARK)


class FrameWriter:
    """Writes a NIfTI file frame by frame under a temporary name beside its target, and its SHA-256 along with it.

    Used as a context; `temporary` is removed at the end unless `keep` was called, which renames it to the target.

    Parameters
    ----------
    path
        The target, ending in `.nii` or `.nii.gz` (compressed).
    header
        As `output_header` makes it.

    >>> import tempfile
    >>> with tempfile.TemporaryDirectory() as folder, FrameWriter(Path(folder) / "a.nii", nib.Nifti1Header()) as writer:
    ...     writer.write(np.zeros((2, 2, 2), np.float32))
    ...     digest = writer.finish()
    ...     writer.temporary.stat().st_size
    384
    """

    def __init__(self, path: Path, header: Any) -> None:
        self.path = path
        self.temporary = path.with_name(f".{path.name}.{os.getpid()}.part")
        self._header = header
        self._compressor = isal_zlib.compressobj(_GZIP_LEVEL, isal_zlib.DEFLATED, -15) if path.suffix == ".gz" else None
        self._checksum = 0
        self._length = 0
        self._digest = hashlib.sha256()
        self._stream: BinaryIO | None = None

    def __enter__(self) -> "FrameWriter":
        self.path.parent.mkdir(parents=True, exist_ok=True)
        # What a killed run left behind would lie about for ever, as its name holds that run's process number.
        for beside in self.path.parent.iterdir():
            if beside.name.startswith(f".{self.path.name}.") and beside.name.endswith(".part"):
                beside.unlink(missing_ok=True)
        self._stream = self.temporary.open("wb")
        if self._compressor is not None:
            self._emit(_GZIP_HEADER)
        self._write_bytes(memoryview(self._header.binaryblock + bytes(4)))
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        if self._stream is not None:
            self._stream.close()
        self.temporary.unlink(missing_ok=True)

    def write(self, frame: np.ndarray) -> None:
        """Append a 3-D frame as little-endian float32, first array axis fastest."""
        values = np.asarray(frame, dtype="<f4").reshape(-1, order="F")
        self._write_bytes(memoryview(cast(Any, values)).cast("B"))

    def finish(self) -> str:
        """Complete the temporary file; returns the SHA-256 (hex) of its bytes."""
        if self._stream is None:
            raise RuntimeError("the writer is not open")
        if self._compressor is not None:
            self._emit(self._compressor.flush())
            self._emit(self._checksum.to_bytes(4, "little") + (self._length & 0xFFFFFFFF).to_bytes(4, "little"))
        self._stream.close()
        return self._digest.hexdigest()

    def keep(self) -> None:
        """Give the completed file its name."""
        self.temporary.replace(self.path)

    def _write_bytes(self, data: memoryview) -> None:
        if self._compressor is None:
            self._emit(data)
            return
        for start in range(0, len(data), _PIECE_BYTES):
            piece = data[start : start + _PIECE_BYTES]
            self._checksum = isal_zlib.crc32(piece, self._checksum)
            self._length += len(piece)
            self._emit(self._compressor.compress(piece))

    def _emit(self, data: "bytes | memoryview") -> None:
        if self._stream is None:
            raise RuntimeError("the writer is not open")
        self._digest.update(data)
        self._stream.write(data)
