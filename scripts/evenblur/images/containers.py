"""Open a volume file with nibabel, after a look that finds what could hurt the machine.

A header can claim anything, a small compressed file can unpack to any size, and some formats name further files. So
nothing is believed that costs memory or time: claims are compared with the file's size before anything is allocated,
header extensions stay unread, and formats that are no volumes or that point elsewhere are not opened at all.
"""

import math
import mmap
import os
import struct
from pathlib import Path
from typing import Any

import numpy as np

from evenblur.errors import InputError
from evenblur.images.digests import image_files
from evenblur.images.nibabel_alone import nib
from evenblur.images.plain_files import check_plain_file

FREE_FRAME_BYTES = 256 << 20
"""A frame up to this size (in double precision) may be packed as tightly as it likes: it hurts no machine."""

FREE_FILE_BYTES = 1 << 30
"""So may a file that unpacks to no more than this."""

TIGHTEST_PACKING = 250
"""No picture with noise in it packs to a smaller share than one in this many; empty ones reach a thousand and more."""

LARGEST_TEXT_HEADER = 16 << 20
"""Headers of the formats that write them as text are read whole."""

LARGEST_MINC = 1 << 30
"""MINC 1 files are read whole."""

LARGEST_MATRIX_FILE = 64 << 10
"""The file that some programs lay beside an Analyze image holds one matrix."""

_PACKED = (".gz", ".mgz", ".bz2", ".zst", ".z")
_ECAT_BLOCK = 512


class _NoExtensions(nib.nifti1.Nifti1Extensions):
    """No header extension: they may be of any size, and hold what is nobody's business."""

    @classmethod
    def from_fileobj(cls, fileobj: Any, size: int, byteswap: bool) -> "_NoExtensions":
        return cls()


class _Header1(nib.Nifti1Header):
    exts_klass = _NoExtensions


class _PairHeader1(nib.nifti1.Nifti1PairHeader):
    exts_klass = _NoExtensions


class _Header2(nib.Nifti2Header):
    exts_klass = _NoExtensions


class _PairHeader2(nib.nifti2.Nifti2PairHeader):
    exts_klass = _NoExtensions


class _Single1(nib.Nifti1Image):
    header_class = _Header1


class _Pair1(nib.Nifti1Pair):
    header_class = _PairHeader1


class _Single2(nib.Nifti2Image):
    header_class = _Header2


class _Pair2(nib.Nifti2Pair):
    header_class = _PairHeader2


# In the order in which nibabel itself looks; surfaces, tables and what needs HDF5 (whose files may point to others)
# are not among them.
_KINDS: tuple[Any, ...] = (
    _Pair1,
    _Single1,
    _Pair2,
    _Single2,
    nib.Spm2AnalyzeImage,
    nib.Spm99AnalyzeImage,
    nib.AnalyzeImage,
    nib.Minc1Image,
    nib.MGHImage,
    nib.parrec.PARRECImage,
    nib.brikhead.AFNIImage,
)


def load_volume(path: Path, *, name: str) -> Any:
    """The nibabel image of a file, opened so that nothing but its geometry is read; see `check_claim`.

    Parameters
    ----------
    path
        The file; of a format with several, the one that the table names.
    name
        How messages call it.

    Raises
    ------
    InputError
        With code `image_unreadable`, `not_a_volume` or `too_large`.
    Exception
        Whatever nibabel raises on a damaged file: the caller turns it into one line.
    """
    for file in image_files(path):
        try:
            check_plain_file(file)
        except OSError as error:
            raise InputError(name, str(error.strerror), "send the file itself", "image_unreadable") from error
    _check_companions(path, name)
    if path.suffix.lower() == ".v":
        return _load_ecat(path, name)
    if path.name.lower().endswith((".mgz", ".mgh.gz")):
        _check_mgh(path, name)
    sniff = None
    for kind in _KINDS:
        fits, sniff = kind.path_maybe_image(str(path), sniff)
        if fits and kind is nib.Minc1Image:
            return kind.from_file_map(kind.make_file_map({"image": _mapped(path)}))  # read to its end at most
        if fits:
            return kind.from_filename(str(path))
    if path.name.lower().endswith((".gii", ".gii.gz", ".trk", ".tck")):
        what = "holds something else than a volume"
        raise InputError(name, what, "send a 3-D image, or a 4-D one with time last", "not_a_volume")
    if path.suffix.lower() == ".mnc":
        raise InputError(name, "is a MINC 2 file, which is not read here", "send it as NIfTI", "image_unreadable")
    raise ValueError("no known format")


def _check_companions(path: Path, name: str) -> None:
    """Look at the files that are read whole: they must be small, and not packed."""
    limits = {".head": LARGEST_TEXT_HEADER, ".par": LARGEST_TEXT_HEADER, ".mat": LARGEST_MATRIX_FILE}
    for file in image_files(path):
        plain = file.name.lower()
        packed = plain.endswith(_PACKED)
        plain = plain.rpartition(".")[0] if packed else plain
        limit = limits.get(os.path.splitext(plain)[1])  # noqa: PTH122 - of a name, not of a path
        if limit is not None and (packed or file.stat().st_size > limit):
            what = "its header is packed, or larger than any header"
            raise InputError(name, what, "send it as NIfTI", "image_unreadable")
        if plain.endswith(".mnc") and (packed or file.stat().st_size > LARGEST_MINC):
            what = "is a MINC file that is packed, or too large to be read whole"
            raise InputError(name, what, "send it as NIfTI", "image_unreadable")


def check_packing(name: str, *, frame_voxels: int, claimed_bytes: int, file_bytes: int) -> None:
    """Refuse a packed file that claims to unpack to far more than any picture does.

    Parameters
    ----------
    name
        How messages call the image.
    frame_voxels
        Voxels of one frame.
    claimed_bytes
        Bytes of all frames as the header tells them.
    file_bytes
        Size of the file.

    Raises
    ------
    InputError
        With code `too_large`.

    >>> check_packing("a.nii.gz", frame_voxels=100**3, claimed_bytes=2 * 100**3, file_bytes=5000)
    """
    free = frame_voxels * 8 <= FREE_FRAME_BYTES and claimed_bytes <= FREE_FILE_BYTES
    if not free and claimed_bytes > TIGHTEST_PACKING * file_bytes:
        what = f"claims to unpack to more than {TIGHTEST_PACKING} times the size of its file"
        raise InputError(name, what, "check its header, or crop the image", "too_large")


def check_claim(source: Any, *, name: str) -> None:
    """Compare what an opened volume's header claims with the size of the file that holds its voxels.

    Raises
    ------
    InputError
        With code `image_unreadable` or `too_large`.
    """
    holder = source.file_map.get("image")
    proxy = source.dataobj
    if holder is None or holder.filename is None or not hasattr(proxy, "offset"):
        return
    file = Path(holder.filename)
    frame, voxels = (math.prod(int(length) for length in lengths) for lengths in (proxy.shape[:3], proxy.shape))
    claimed = int(proxy.offset) + voxels * np.dtype(proxy.dtype).itemsize
    file_bytes = file.stat().st_size
    if file.name.lower().endswith(_PACKED):
        check_packing(name, frame_voxels=frame, claimed_bytes=claimed, file_bytes=file_bytes)
    elif claimed > file_bytes:
        what = "cannot be read (the file ends before its last voxel)"
        raise InputError(name, what, "send the file again", "image_unreadable")


def _check_mgh(path: Path, name: str) -> None:
    """The same for a packed MGH file, whose reader runs through all voxels before it says how many there are."""
    with nib.openers.ImageOpener(str(path)) as stream:
        head = stream.read(24)
    lengths = struct.unpack(">4i", head[4:20])
    if min(lengths) < 1:
        raise ValueError("no size")
    frame = lengths[0] * lengths[1] * lengths[2]
    check_packing(
        name, frame_voxels=frame, claimed_bytes=frame * lengths[3] * 4, file_bytes=max(1, path.stat().st_size)
    )


def _mapped(path: Path) -> Any:
    """A file's bytes, mapped: what is not read takes no memory, and no open file stays behind."""
    with path.open("rb") as stream:
        return mmap.mmap(stream.fileno(), 0, access=mmap.ACCESS_READ)


def _load_ecat(path: Path, name: str) -> Any:
    """An ECAT 7 volume, which nibabel knows but does not look for by itself."""
    data = _mapped(path)
    _check_ecat_directory(data)
    kind = nib.ecat.EcatImage
    source = kind.from_file_map(kind.make_file_map({"header": data, "image": data}))
    subheaders = source.get_subheaders()
    frames = len(subheaders.subheaders)
    if frames != source.shape[3] or any(subheaders.get_shape(k) != source.shape[:3] for k in range(frames)):
        raise InputError(name, "its frames differ in size", "send frames of one size", "not_a_volume")
    return source


def _check_ecat_directory(data: Any) -> None:
    """Follow the list of frames once: one that leads in a circle would never end."""
    seen: set[int] = set()
    block = 2
    while block > 2 or not seen:
        start = (block - 1) * _ECAT_BLOCK
        head = data[start : start + 16]
        if block in seen or len(head) < 16:
            raise ValueError("a list of frames without an end")
        seen.add(block)
        block = struct.unpack(">4i", head)[1]
