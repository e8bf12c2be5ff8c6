"""How many voxels an image holds, from its header alone or bounded by its size, with the standard library only."""

import bz2
import gzip
import os
import struct
import zlib
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

# Header and its place: NIfTI-1 (348 bytes) keeps dim as eight int16 from byte 40, NIfTI-2 (540) as int64 from byte 16.
# Both by the NIfTI standard, which Analyze's header shares up to there.
_HEADERS = ((348, "8h", 40), (540, "8q", 16))
_OPENERS: dict[str, Callable[..., Any]] = {".gz": gzip.open, ".bz2": bz2.open}

MOST_PACKED = 8
"""What a compressed file of another format is taken to unpack to, times its size (common practice, no source)."""

BYTES_A_VOXEL = 2
"""What other formats keep a voxel in at least: ECAT and DICOM store 16-bit numbers."""


@dataclass(frozen=True)
class Extent:
    """Voxels of one frame, and frames. Where the header is not read, one frame that may be too large."""

    voxels: int
    frames: int


def image_extent(path: Path) -> Extent:
    """Read the extent of an image; of anything but NIfTI and Analyze a bound that its size on disk gives.

    Parameters
    ----------
    path
        The image: a file, or a folder with a DICOM series.

    Raises
    ------
    OSError
        If it is not there or may not be read.

    >>> import tempfile
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     dims = struct.pack("<i", 348) + bytes(36) + struct.pack("<8h", 4, 10, 20, 30, 5, 1, 1, 1)
    ...     _ = (Path(folder) / "a.nii").write_bytes(dims.ljust(352, b"0"))
    ...     image_extent(Path(folder) / "a.nii")
    Extent(voxels=6000, frames=5)
    """
    if path.is_dir():
        names = (os.path.join(where, name) for where, _, files in os.walk(path) for name in files)  # noqa: PTH118
        return Extent(sum(os.stat(name).st_size for name in names) // BYTES_A_VOXEL, 1)  # noqa: PTH116
    size = path.stat().st_size
    opener = _OPENERS.get(path.suffix.lower(), open)
    try:
        with opener(path, "rb") as stream:
            head = stream.read(544)
    except (EOFError, ValueError, zlib.error):  # damaged: the steps will say so
        head = b""
    except OSError:
        if opener is open:
            raise
        head = b""
    return _from_header(head) or Extent(size * (MOST_PACKED if opener is not open else 1) // BYTES_A_VOXEL, 1)


def _from_header(head: bytes) -> Extent | None:
    for order in "<>":
        for length, dims, place in _HEADERS:
            if len(head) < 348 or struct.unpack_from(f"{order}i", head)[0] != length:
                continue
            count, *sizes = struct.unpack_from(order + dims, head, place)
            if 1 <= count <= 7 and all(size >= 1 for size in sizes[:count]):
                sizes = sizes[:count] + [1] * (7 - count)
                return Extent(sizes[0] * sizes[1] * sizes[2], sizes[3] * sizes[4] * sizes[5] * sizes[6])
    return None
