"""Fixity of a bag (RFC 8493): every file listed, every listed file there, every byte as listed."""

import hashlib
import os
import re
from pathlib import Path

from evenblur.check.findings import DisagreementError

_LINE = re.compile(r"([0-9a-fA-F]{64})[ \t]+\*?(.+)")
_NEEDED = ("bagit.txt", "bag-info.txt", "manifest-sha256.txt", "tagmanifest-sha256.txt")


def check_fixity(bag: Path) -> int:
    """Check a bag's manifests against its files; returns the number of files compared.

    Raises
    ------
    DisagreementError
        With the first file that is missing, too many, or not as listed.
    """
    for name in _NEEDED:
        if not (bag / name).is_file():
            raise DisagreementError(name, "is missing, so this is no whole bag")
    _check_declaration(bag)
    files = _files(bag)
    payload = {name for name in files if name.startswith("data/")}
    tags = files - payload - {"tagmanifest-sha256.txt"}
    listed_tags = read_manifest(bag, "tagmanifest-sha256.txt")
    listed = read_manifest(bag, "manifest-sha256.txt")
    # The tag manifest first: where it fails, what the other tag files say is worth nothing.
    for found, names in ((tags, listed_tags), (payload, listed)):
        for name in sorted(found - set(names)):
            raise DisagreementError(name, "is in the bag and no manifest lists it")
        for name in sorted(set(names) - found):
            raise DisagreementError(name, "is listed in a manifest and is not in the bag")
        for name, sha256 in names.items():
            if file_sha256(bag / name) != sha256:
                raise DisagreementError(name, "has other bytes than its manifest lists")
    _check_oxum(bag, payload)
    return len(listed) + len(listed_tags)


def _check_declaration(bag: Path) -> None:
    expected = "BagIt-Version: 1.0\nTag-File-Character-Encoding: UTF-8\n"
    if (bag / "bagit.txt").read_bytes() != expected.encode():
        raise DisagreementError("bagit.txt", "is not the declaration of a bag of version 1.0 in UTF-8")


def _files(bag: Path) -> set[str]:
    found = set()
    for folder, _, names in os.walk(bag):
        for name in names:
            path = Path(folder, name)
            relative = path.relative_to(bag).as_posix()
            if path.is_symlink() or not path.is_file():
                raise DisagreementError(relative, "is a link or no plain file")
            found.add(relative)
    return found


def read_manifest(bag: Path, name: str) -> dict[str, str]:
    """Hashes by file of a manifest, the names decoded.

    Raises
    ------
    DisagreementError
        If a line is none of a manifest, names a file outside the bag, or names one twice.
    """
    listed: dict[str, str] = {}
    try:
        lines = re.split("\r?\n|\r", (bag / name).read_bytes().decode())
        lines = lines[:-1] if lines[-1] == "" else lines
    except (OSError, ValueError):
        raise DisagreementError(name, "cannot be read as UTF-8") from None
    for number, line in enumerate(lines, start=1):
        match = _LINE.fullmatch(line)
        if match is None:
            raise DisagreementError(f"{name}, line {number}", "is no line of a manifest")
        path = decoded(match.group(2))
        if path.startswith(("/", "~")) or ".." in path.split("/"):
            raise DisagreementError(f"{name}, line {number}", "names a file outside the bag")
        if path in listed:
            raise DisagreementError(f"{name}, line {number}", f"names {path} a second time")
        listed[path] = match.group(1).lower()
    return listed


def decoded(name: str) -> str:
    r"""A file's name from its form in a manifest: %0A, %0D and %25 stand for line ends and the percent sign.

    >>> decoded("data/100%25 a%0a.txt")
    'data/100% a\n.txt'
    """
    signs = {"0A": "\n", "0D": "\r", "25": "%"}
    return re.sub(r"%(0A|0D|25)", lambda match: signs[match.group(1).upper()], name, flags=re.IGNORECASE)


def _check_oxum(bag: Path, payload: set[str]) -> None:
    lines = (bag / "bag-info.txt").read_text(encoding="utf-8").splitlines()
    oxum = [line.partition(":")[2].strip() for line in lines if line.lower().startswith("payload-oxum:")]
    size = sum((bag / name).stat().st_size for name in payload)
    if oxum != [f"{size}.{len(payload)}"]:
        raise DisagreementError("bag-info.txt", f"Payload-Oxum is not {size}.{len(payload)}")


def file_sha256(path: Path) -> str:
    """SHA-256 (hex) of a file."""
    with path.open("rb") as stream:
        return hashlib.file_digest(stream, "sha256").hexdigest()
