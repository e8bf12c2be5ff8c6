"""Write a bag (RFC 8493): payload under data/, manifests with SHA-256, built beside its place and then renamed."""

import hashlib
import os
import shutil
from collections.abc import Callable, Iterable, Mapping
from pathlib import Path

DECLARATION = "BagIt-Version: 1.0\nTag-File-Character-Encoding: UTF-8\n"
TAG_MANIFEST = "tagmanifest-sha256.txt"
MANIFEST = "manifest-sha256.txt"

Payload = Mapping[str, Callable[[Path], object]]
"""What writes each payload file, by its name below data/ (`/` between folders): called with the path to write to."""


def manifest_name(name: str) -> str:
    r"""A file's name as a manifest has it: line ends and the percent sign are percent-encoded (RFC 8493, 2.1.3).

    >>> manifest_name("data/100% a\n.txt")
    'data/100%25 a%0A.txt'
    """
    return name.replace("%", "%25").replace("\r", "%0D").replace("\n", "%0A")


def text_file(text: str) -> Callable[[Path], object]:
    """A payload file with this text."""
    return lambda path: path.write_bytes(text.encode())


def copied_file(source: Path) -> Callable[[Path], object]:
    """A payload file with the bytes of another file."""
    return lambda path: shutil.copyfile(source, path)


def write_bag(target: Path, *, payload: Payload, info: Mapping[str, str]) -> None:
    """Write a bag whole or not at all: a bag that stood there before stays until the new one is complete.

    The manifests name exactly the files of `payload`. The bag grows under a hidden name beside its place, its tag
    manifest last, so that no state of a killed packing is a valid bag.

    Parameters
    ----------
    target
        The bag's folder.
    payload
        Its files.
    info
        Elements of bag-info.txt; Payload-Oxum is added.

    Raises
    ------
    ValueError
        If a name is not a plain relative path.

    >>> import tempfile
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     bag = Path(folder) / "bag"
    ...     write_bag(bag, payload={"a.txt": text_file("a")}, info={"Bagging-Date": "2026-01-31"})
    ...     (bag / "bag-info.txt").read_text().splitlines()
    ['Bagging-Date: 2026-01-31', 'Payload-Oxum: 1.1']
    """
    for name in payload:
        if not name or name.startswith("/") or any(part in ("", ".", "..") for part in name.split("/")):
            raise ValueError(f"{name!r} is no name for a file in a bag")
    _tidy(target)
    growing = target.with_name(f".{target.name}.{os.getpid()}.part")
    try:
        for name, write in payload.items():
            path = growing / "data" / name
            path.parent.mkdir(parents=True, exist_ok=True)
            write(path)
        _seal(growing, payload, info)
        _take_place(growing, target)
    finally:
        shutil.rmtree(growing, ignore_errors=True)


def _seal(growing: Path, names: Iterable[str], info: Mapping[str, str]) -> None:
    growing.joinpath("data").mkdir(parents=True, exist_ok=True)
    payload = sorted(f"data/{name}" for name in names)
    size = sum((growing / name).stat().st_size for name in payload)
    elements = {**info, "Payload-Oxum": f"{size}.{len(payload)}"}
    tags = {
        "bag-info.txt": "".join(f"{label}: {' '.join(value.split())}\n" for label, value in elements.items()),
        "bagit.txt": DECLARATION,
        MANIFEST: _manifest(growing, payload),
    }
    for name, text in tags.items():
        (growing / name).write_bytes(text.encode())
    (growing / TAG_MANIFEST).write_bytes(_manifest(growing, tags).encode())


def _manifest(folder: Path, names: Iterable[str]) -> str:
    return "".join(f"{_sha256(folder / name)}  {manifest_name(name)}\n" for name in names)


def _sha256(path: Path) -> str:
    with path.open("rb") as stream:
        return hashlib.file_digest(stream, "sha256").hexdigest()


def _previous(target: Path) -> Path:
    return target.with_name(f".{target.name}.previous")


def _tidy(target: Path) -> None:
    """Clear up after a packing that was killed: its half bag goes, an old bag that it had moved aside comes back."""
    target.parent.mkdir(parents=True, exist_ok=True)
    for beside in target.parent.iterdir():
        if beside.name.startswith(f".{target.name}.") and beside.name.endswith(".part"):
            shutil.rmtree(beside)
    aside = _previous(target)
    if aside.is_dir():
        if (target / TAG_MANIFEST).exists():
            shutil.rmtree(aside)
        else:
            shutil.rmtree(target, ignore_errors=True)
            aside.rename(target)


def _take_place(growing: Path, target: Path) -> None:
    aside = _previous(target)
    if target.exists():
        target.rename(aside)
    try:
        growing.rename(target)
    except OSError:
        if aside.exists():
            aside.rename(target)
        raise
    shutil.rmtree(aside, ignore_errors=True)
