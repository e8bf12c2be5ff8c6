"""See that records and the images beside them arrived whole."""

from collections.abc import Iterable
from pathlib import Path
from typing import Any

from evenblur.command import read_record
from evenblur.errors import InputError
from evenblur.images.digests import file_sha256


def note_on_records(records: Iterable[Path]) -> dict[str, Any]:
    """Hashes of records, after a look at each: it reads, and the image beside it has the hash that it states.

    Parameters
    ----------
    records
        Record files: of intake, or beside harmonised images.

    Returns
    -------
    dict
        `records`: SHA-256 by path as given.

    Raises
    ------
    InputError
        If a record cannot be read, or its image is missing or another one.
    """
    hashes = {}
    for path in records:
        record = read_record(path)
        stated = (record.get("Evenblur") or {}).get("output", {}).get("sha256")
        image = path.with_name(path.name.removesuffix(".json") + ".nii.gz")
        if stated is not None and (not image.is_file() or file_sha256(image) != stated):
            raise InputError(str(image), "is not the image that its record states", "delete both and run again")
        hashes[path.as_posix()] = file_sha256(path)
    return {"records": hashes}
