"""Open an image that a site sent: any volume that nibabel reads, or a folder with one DICOM series."""

from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from evenblur.errors import InputError
from evenblur.images.containers import check_claim, load_volume
from evenblur.images.grid import Grid, grid_from_affine
from evenblur.images.nibabel_alone import nib

# NIfTI may state its lengths in metres or micrometres; nibabel hands the affine over as it stands in the file.
MM_PER_UNIT = {"unknown": 1.0, "mm": 1.0, "meter": 1000.0, "micron": 0.001}

LARGEST_FRAME_BYTES = 2 << 30
"""What one frame may take in double precision; a header can claim anything."""


@dataclass(frozen=True)
class Image:
    """An opened image: its grid, its number of frames, and its frames one by one.

    Attributes
    ----------
    name
        The path as the user's table has it, for messages.
    source
        The nibabel image or the DICOM series; either has `shape` and `affine`.
    grid
        The voxel grid.
    frames
        Number of time frames; 1 for a 3-D image.
    """

    name: str
    source: Any
    grid: Grid
    frames: int

    @property
    def sidecar_fields(self) -> dict[str, Any]:
        """What the image's own header says of tracer, frames and reconstruction, by the names of BIDS."""
        return dict(getattr(self.source, "sidecar_fields", {}))

    def frame(self, index: int = 0) -> np.ndarray:
        """Frame `index` as a 3-D float64 array in the file's axis order.

        Raises
        ------
        InputError
            If the file's data cannot be read (truncated, damaged).
        """
        read_frame = getattr(self.source, "read_frame", None)
        if read_frame is not None:
            return np.asarray(read_frame(index))
        try:
            proxy = self.source.dataobj
            values = proxy[..., index] if len(self.source.shape) > 3 else proxy
            return np.asarray(values, dtype=np.float64).reshape(self.grid.shape)
        except (OSError, EOFError, ValueError, OverflowError, TypeError, MemoryError) as error:
            raise _unreadable(self.name, error) from error
        except Exception as error:  # zlib and codec errors share no base class
            raise _unreadable(self.name, error) from error

    def iter_frames(self) -> Iterator[np.ndarray]:
        """All frames in order, each a 3-D float64 array."""
        return (self.frame(index) for index in range(self.frames))


def open_image(path: Path, *, name: str | None = None) -> Image:
    """Open an image and read its geometry, not yet its voxels.

    Parameters
    ----------
    path
        The file, or a folder with one DICOM series.
    name
        How messages call it; the path itself by default.

    Raises
    ------
    InputError
        With code `image_missing`, `image_unreadable`, `not_a_volume` or `too_large`.
    """
    name = name or str(path)
    if not path.exists():
        raise InputError(name, "the file is missing", "send it, or correct the path in the table", "image_missing")
    if path.is_dir():
        return _open_folder(path, name)
    try:
        source: Any = load_volume(path, name=name)
        shape = tuple(int(length) for length in source.shape)
        affine = np.asarray(source.affine, dtype=float)
    except InputError:
        raise
    except AttributeError as error:  # surfaces, tracts and tables have no affine
        wrong = "holds something else than a volume"
        raise InputError(name, wrong, "send a 3-D image, or a 4-D one with time last", "not_a_volume") from error
    except Exception as error:  # nibabel's readers raise many kinds of error on damaged files
        raise _unreadable(name, error) from error
    if isinstance(source, nib.minc1.Minc1Image) and len(shape) == 4:
        # MINC puts time first, so its fourth axis is one of space.
        raise InputError(name, "a dynamic MINC image has time first", "send it as NIfTI", "not_a_volume")
    while len(shape) > 3 and shape[-1] == 1:
        shape = shape[:-1]
    if len(shape) not in (3, 4) or min(shape) < 1 or max(shape[:3]) < 2:
        wrong = f"shape {'x'.join(map(str, source.shape))} is not a volume"
        raise InputError(name, wrong, "send a 3-D image, or a 4-D one with time last", "not_a_volume")
    if int(np.prod(np.array(shape[:3], dtype=object))) * 8 > LARGEST_FRAME_BYTES:
        wrong = f"claims {'x'.join(map(str, shape[:3]))} voxels, more than 2 GiB a frame"
        raise InputError(name, wrong, "check its header, or crop the image", "too_large")
    # Not every proxy tells its number type (ECAT's does not); those that do not hold plain numbers.
    if np.dtype(getattr(source.dataobj, "dtype", np.float32)).kind not in "iufb":
        raise InputError(name, "its voxels are no plain numbers", "send the magnitude or one channel", "not_a_volume")
    try:
        check_claim(source, name=name)
        units = source.header.get_xyzt_units()[0] if hasattr(source.header, "get_xyzt_units") else "mm"
        scale = MM_PER_UNIT.get(units, 1.0)
        with np.errstate(all="ignore"):
            grid = grid_from_affine(np.diag([scale, scale, scale, 1.0]) @ affine, shape)
    except InputError:
        raise
    except (ValueError, KeyError) as error:
        raise InputError(name, str(error), "correct the header's geometry", "image_unreadable") from error
    return Image(name=name, source=source, grid=grid, frames=shape[3] if len(shape) == 4 else 1)


def _open_folder(path: Path, name: str) -> Image:
    try:
        from evenblur.images.dicom import open_series  # here, because its import takes longer than a small scan
    except ModuleNotFoundError as error:
        raise _unreadable(name, error) from error
    series = open_series(path, name=name)
    try:
        grid = grid_from_affine(series.affine, series.shape)
    except ValueError as error:
        raise InputError(name, str(error), "correct the header's geometry", "image_unreadable") from error
    return Image(name=name, source=series, grid=grid, frames=len(series.stack.frames))


def _unreadable(name: str, error: Exception) -> InputError:
    if isinstance(error, ModuleNotFoundError):
        what = f"its format needs the Python package {error.name}, which is not installed"
        return InputError(name, what, "send it as NIfTI", "image_unreadable")
    # The reader's own words are left out: they may quote the header or the place of the file.
    what = f"cannot be read: damaged, cut short or of no known format ({type(error).__name__})"
    return InputError(name, what, "send the file again", "image_unreadable")
