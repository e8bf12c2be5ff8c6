"""Read images by nibabel and pydicom directly, frame by frame, on the grid of a file that should match."""

import io
import logging
import warnings
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import nibabel as nib
import numpy as np

MM = {"unknown": 1.0, "mm": 1.0, "meter": 1000.0, "micron": 0.001}


class UnreadableError(Exception):
    """An image that this route does not read; it is no proof of anything."""


class Volume:
    """An image: `shape` of a frame, number of `frames`, `affine` (4 x 4) and voxel sizes `voxel_mm`."""

    def __init__(self, path: Path) -> None:
        image: Any = _ecat(path) if path.suffix.lower() == ".v" else _plain(path)
        self._image = image
        shape = tuple(image.shape)
        while len(shape) > 3 and shape[-1] == 1:
            shape = shape[:-1]
        self.shape, self.frames = shape[:3], shape[3] if len(shape) > 3 else 1
        self._several = len(shape) > 3
        self.affine = np.asarray(image.affine, dtype=np.float64)
        header = image.header
        unit = header.get_xyzt_units()[0] if hasattr(header, "get_xyzt_units") else "mm"
        self.voxel_mm = np.linalg.norm(self.affine[:3, :3], axis=0) * MM[unit]

    @property
    def axial(self) -> int:
        """The array axis along the bed."""
        return int(np.argmax(np.abs(self.affine[2, :3]) / np.linalg.norm(self.affine[:3, :3], axis=0)))

    def read(self) -> Iterator[np.ndarray]:
        """Each frame as a 3-D float64 array."""
        for index in range(self.frames):
            part = self._image.dataobj[..., index] if self._several else self._image.dataobj
            yield np.asarray(part, dtype=np.float64).reshape(self.shape)


def _plain(path: Path) -> Any:
    # Kept open, a compressed file is read through once and not from its start for every frame.
    return nib.load(path, keep_file_open=True)


def _ecat(path: Path) -> Any:
    kind, data = nib.ecat.EcatImage, io.BytesIO(path.read_bytes())
    return kind.from_file_map(kind.make_file_map({"header": data, "image": data}))


def read_series(folder: Path, like: Volume) -> Iterator[np.ndarray]:
    """Frames of a DICOM series of single pictures, each slice put where the grid of `like` has its position.

    Raises
    ------
    UnreadableError
        For files of several pictures, and for frames that no acquisition time tells apart.
    """
    places: dict[int, list[tuple[Any, np.ndarray]]] = {}
    to_voxel = np.linalg.inv(like.affine)
    for path in sorted(p for p in folder.rglob("*") if p.is_file() and not _beside(p, folder)):
        time, position, values = _slice(path)
        # DICOM counts x to the left and y to the back.
        voxel = to_voxel @ np.array([-position[0], -position[1], position[2], 1.0])
        if np.max(np.abs(voxel[:3] - [0, 0, round(voxel[2])])) > 0.1:
            raise UnreadableError("a slice lies off the grid of the harmonised image")
        places.setdefault(round(voxel[2]), []).append((time, values))
    counts = {len(found) for found in places.values()}
    if sorted(places) != list(range(like.shape[2])) or counts != {like.frames}:
        raise UnreadableError("the series has other slices than the harmonised image")
    for found in places.values():
        if like.frames > 1 and len({time for time, _ in found}) != like.frames:
            raise UnreadableError("no acquisition time tells its frames apart")
        found.sort(key=lambda pair: pair[0])
    for frame in range(like.frames):
        yield np.stack([places[index][frame][1] for index in range(like.shape[2])], axis=-1)


def _beside(path: Path, folder: Path) -> bool:
    """Whether a file is none of the series: hidden, a note, or what systems leave in folders."""
    parts, name = path.relative_to(folder).parts, path.name.upper()
    known = ("DICOMDIR", "LOCKFILE", "THUMBS.DB", "DESKTOP.INI")
    return any(part.startswith(".") for part in parts) or name in known or name.startswith("README")


def _slice(path: Path) -> tuple[Any, list[float], np.ndarray]:
    import pydicom

    logging.getLogger("pydicom").setLevel(logging.CRITICAL)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        try:
            data = pydicom.dcmread(path, force=False)
            if int(data.get("NumberOfFrames", 1)) != 1 or "ImagePositionPatient" not in data:
                raise UnreadableError("its files hold several pictures each")
            slope, intercept = float(data.get("RescaleSlope", 1)), float(data.get("RescaleIntercept", 0))
            values = data.pixel_array.astype(float).T * slope + intercept
            time = (str(data.get("AcquisitionDate", "")), float(data.get("AcquisitionTime") or 0))
            return time, [float(part) for part in data.ImagePositionPatient], values
        except UnreadableError:
            raise
        except Exception as error:  # its text would quote the header
            raise UnreadableError(f"a file cannot be read ({type(error).__name__})") from None
