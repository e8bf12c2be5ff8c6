"""Identities of images: SHA-256 of a file, of a folder, of the voxels."""

import hashlib
from collections.abc import Iterable
from pathlib import Path

import numpy as np


def file_sha256(path: Path) -> str:
    """SHA-256 (hex) of a file's bytes."""
    with path.open("rb") as stream:
        return hashlib.file_digest(stream, "sha256").hexdigest()


def folder_sha256(folder: Path) -> str:
    """SHA-256 (hex) of a folder: of its sorted lines (name, hash), one a file, names relative with `/`."""
    lines = sorted(
        f"{path.relative_to(folder).as_posix()}\0{file_sha256(path)}\n" for path in folder.rglob("*") if path.is_file()
    )
    return hashlib.sha256("".join(lines).encode()).hexdigest()


def image_sha256(path: Path) -> str:
    """SHA-256 (hex) of an image: a file's bytes, or a folder as a whole."""
    return folder_sha256(path) if path.is_dir() else file_sha256(path)


def voxels_sha256(frames: Iterable[np.ndarray]) -> str:
    """SHA-256 (hex) of voxel values: each 3-D frame as little-endian float32, first array axis fastest.

    The file's compression, header and number type do not enter, so two files with the same picture agree.
    """
    digest = hashlib.sha256()
    for frame in frames:
        digest.update(np.asarray(frame, dtype="<f4").tobytes(order="F"))
    return digest.hexdigest()
