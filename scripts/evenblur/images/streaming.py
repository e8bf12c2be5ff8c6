"""Read an image frame by frame in single precision, so that memory does not grow with the number of frames."""

import io
from collections.abc import Iterator
from contextlib import ExitStack
from pathlib import Path
from typing import Any, cast

import numpy as np
from isal import igzip

from evenblur.errors import InputError
from evenblur.images.nibabel_alone import nib
from evenblur.images.reading import Image

# Integers are scaled in double precision, this many values at a time.
_PIECE_VALUES = 1 << 15
# A few programs write something behind the voxels; a small file can unpack to any length there.
_LARGEST_REST = 64 << 20


def iter_frames_float32(image: Image) -> Iterator[np.ndarray]:
    """Frames of an image in order, each a 3-D float32 array in the file's axis order, first axis fastest.

    The array is used again for the next frame: what is to be kept must be copied. Files of the NIfTI and Analyze
    family are read from front to back once, also when compressed; other formats go through nibabel frame by frame.

    Parameters
    ----------
    image
        An opened image.

    Raises
    ------
    InputError
        With code `image_unreadable` if the data are damaged or cut short, or `image_not_finite` if they hold infinite
        values (or values beyond single precision).

    >>> import nibabel, tempfile
    >>> from evenblur.images.reading import open_image
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     path = Path(folder) / "a.nii"
    ...     nibabel.save(nibabel.Nifti1Image(np.ones((2, 3, 4, 5), np.int16), np.eye(4)), path)
    ...     sum(float(frame.sum()) for frame in iter_frames_float32(open_image(path)))
    120.0
    """
    path = _data_file(image)
    if path is None:
        for index in range(image.frames):
            with np.errstate(over="ignore"):
                frame = np.asfortranarray(image.frame(index), dtype=np.float32)
            _refuse_infinite(image, frame)
            yield frame
        return
    try:
        yield from _read_through(image, path)
    except InputError:
        raise
    except (OSError, EOFError, ValueError, MemoryError) as error:
        raise _unreadable(image, type(error).__name__) from error
    except Exception as error:  # errors of the gzip codec share no base class with the others
        raise _unreadable(image, type(error).__name__) from error


def _data_file(image: Image) -> "Path | None":
    """The file to read from front to back; None where nibabel has to do the reading."""
    if not isinstance(image.source, nib.analyze.AnalyzeImage):
        return None
    proxy: Any = image.source.dataobj
    name = image.source.file_map["image"].filename
    plain = hasattr(proxy, "offset") and np.dtype(proxy.dtype).kind in "iufb" and np.dtype(proxy.dtype).itemsize <= 8
    if name is None or not plain or Path(name).suffix.lower() in (".bz2", ".zst"):
        return None
    return Path(name)


def _read_through(image: Image, path: Path) -> Iterator[np.ndarray]:
    proxy: Any = image.source.dataobj
    stored: Any = np.dtype(proxy.dtype)
    slope, inter = float(proxy.slope), float(proxy.inter)
    frame = np.empty(int(np.prod(image.grid.shape)), dtype=np.float32)
    raw, scaled = np.empty(_PIECE_VALUES, dtype=stored), np.empty(_PIECE_VALUES)
    raw_bytes = memoryview(cast(Any, raw)).cast("B")
    with ExitStack() as stack:
        stream: Any = stack.enter_context(path.open("rb"))
        if path.suffix.lower() in (".gz", ".mgz"):
            stream = stack.enter_context(igzip.IGzipFile(fileobj=stream, mode="rb"))
        _skip(stream, int(proxy.offset))
        for _ in range(image.frames):
            if stored == np.dtype("<f4") and slope == 1.0 and inter == 0.0:
                _fill(image, stream, memoryview(cast(Any, frame)).cast("B"))
            else:
                for start in range(0, frame.size, _PIECE_VALUES):
                    piece = frame[start : start + _PIECE_VALUES]
                    _fill(image, stream, raw_bytes[: piece.size * stored.itemsize])
                    values = scaled[: piece.size]
                    np.multiply(raw[: piece.size], slope, out=values)
                    if inter != 0.0:
                        values += inter
                    with np.errstate(over="ignore"):
                        piece[...] = values
            _refuse_infinite(image, frame)
            yield frame.reshape(image.grid.shape, order="F")
        # The checksum stands at the end of a compressed file, and only a reader that gets there compares it.
        rest = 0
        while path.suffix.lower() in (".gz", ".mgz") and (read := len(stream.read(1 << 20))):
            rest += read
            if rest > _LARGEST_REST:
                raise _unreadable(image, "the file goes on far behind its last voxel")


def _skip(stream: Any, count: int) -> None:
    while count > 0:
        passed = len(stream.read(min(count, 1 << 20)))
        if not passed:
            raise EOFError("the file ends within its header")
        count -= passed


def _fill(image: Image, stream: "io.BufferedIOBase", buffer: memoryview) -> None:
    done = 0
    while done < len(buffer):
        count = stream.readinto(buffer[done:])
        if not count:
            raise _unreadable(image, "the file ends before its last voxel")
        done += count


def _refuse_infinite(image: Image, frame: np.ndarray) -> None:
    flat = frame.reshape(-1, order="F")
    with np.errstate(over="ignore", invalid="ignore"):
        if np.isfinite(np.dot(flat, flat)) or not np.isinf(flat).any():  # the product is the quick look
            return
    what = "holds infinite values, or values beyond single precision"
    raise InputError(image.name, what, "export the image again in usual units", "image_not_finite")


def _unreadable(image: Image, reason: str) -> InputError:
    # The codec's own words are left out: they may quote the place of the file.
    return InputError(image.name, f"cannot be read ({reason})", "send the file again", "image_unreadable")
