"""Pack a phantom's volume: its voxels and its grid, and nothing else of its file."""

import hashlib
from pathlib import Path

import numpy as np

from evenblur.errors import InputError
from evenblur.images.digests import image_sha256
from evenblur.images.reading import open_image
from evenblur.images.streaming import iter_frames_float32
from evenblur.images.writing import FrameWriter, output_header


def pack_volume(image: Path, *, name: str, out: Path, sha256: str, voxels_sha256: str | None = None) -> None:
    """Write a phantom's volume as a compressed float32 NIfTI file, whatever its format was.

    Headers of DICOM, ECAT and NIfTI files may name persons and places, and NIfTI has room for free text besides. So no
    original is packed: the voxels are written anew with the grid alone. The voxels' hash is that of the intake record,
    which shows that they are the ones that were measured.

    Parameters
    ----------
    image
        The phantom's file or folder.
    name
        Its path as the user's table has it, for messages.
    out
        Where the volume goes, `.nii.gz`.
    sha256
        The identity that the image must have.
    voxels_sha256
        The hash that its voxels must have; None where no record says.

    Raises
    ------
    InputError
        If the image changed since it was taken in, or cannot be read.

    >>> import tempfile
    >>> from evenblur.images.nibabel_alone import nib
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     scan, out = Path(folder) / "a.nii", Path(folder) / "b.nii.gz"
    ...     scanned = nib.Nifti1Image(np.ones((2, 2, 2), np.int16), np.eye(4))
    ...     scanned.header["descrip"] = b"a name"
    ...     nib.save(scanned, scan)
    ...     pack_volume(scan, name="a.nii", out=out, sha256=image_sha256(scan))
    ...     packed = nib.load(out)
    ...     packed.header["descrip"].item(), float(packed.get_fdata().sum())
    (b'', 8.0)
    """
    opened = open_image(image, name=name)
    if image_sha256(image) != sha256:
        raise _changed(name)
    digest = hashlib.sha256()
    with FrameWriter(out, output_header(opened)) as writer:
        for frame in iter_frames_float32(opened):
            writer.write(frame)
            digest.update(np.asarray(frame, dtype="<f4").tobytes(order="F"))
        writer.finish()
        if voxels_sha256 is not None and digest.hexdigest() != voxels_sha256:
            raise _changed(name)
        writer.keep()


def _changed(name: str) -> InputError:
    return InputError(name, "the image changed during the run", "run again")
