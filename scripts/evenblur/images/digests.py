"""Identities of images: SHA-256 of a file, of a folder, of the voxels."""

import hashlib
import os
from collections.abc import Iterable
from pathlib import Path

import numpy as np

from evenblur.images.plain_files import check_plain_file

_PAIRS = ((".hdr", ".img", ".mat"), (".head", ".brik"), (".par", ".rec"))


def file_sha256(path: Path) -> str:
    """SHA-256 (hex) of a file's bytes."""
    check_plain_file(path)
    with path.open("rb") as stream:
        return hashlib.file_digest(stream, "sha256").hexdigest()


def folder_sha256(folder: Path) -> str:
    """SHA-256 (hex) of a folder: of its sorted lines (name, hash), one a file, names relative with `/`."""
    lines = sorted(
        f"{path.relative_to(folder).as_posix()}\0{file_sha256(path)}\n" for path in folder.rglob("*") if path.is_file()
    )
    return hashlib.sha256(os.fsencode("".join(lines))).hexdigest()  # names of other systems may be no UTF-8


def image_files(path: Path) -> list[Path]:
    """The files of an image that is no folder: itself, and those that formats of two files keep beside it.

    Header and voxels apart (`.hdr` and `.img`, `.HEAD` and `.BRIK`, `.PAR` and `.REC`) are one image.
    """
    plain = path.name.lower().removesuffix(".gz").removesuffix(".bz2")
    pair = next((group for group in _PAIRS if plain.endswith(group)), None)
    if pair is None:
        return [path]
    stem = plain.rpartition(".")[0]
    beside = (other for other in path.parent.iterdir() if other.name.lower().startswith(f"{stem}."))
    endings = tuple(f"{stem}{ending}{packed}" for ending in pair for packed in ("", ".gz", ".bz2"))
    return sorted({path, *(other for other in beside if other.name.lower() in endings)})


def image_sha256(path: Path) -> str:
    """SHA-256 (hex) of an image: a file's bytes, or all files of a folder or of a format with several."""
    if path.is_dir():
        return folder_sha256(path)
    files = image_files(path)
    if len(files) == 1:
        return file_sha256(path)
    lines = "".join(f"{file.name}\0{file_sha256(file)}\n" for file in files)
    return hashlib.sha256(os.fsencode(lines)).hexdigest()


def voxels_sha256(frames: Iterable[np.ndarray]) -> str:
    """SHA-256 (hex) of voxel values: each 3-D frame as little-endian float32, first array axis fastest.

    The file's compression, header and number type do not enter, so two files with the same picture agree.
    """
    digest = hashlib.sha256()
    for frame in frames:
        digest.update(np.asarray(frame, dtype="<f4").tobytes(order="F"))
    return digest.hexdigest()
