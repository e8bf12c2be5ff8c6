"""What header and sidecar say of how an image was made: the facts that a phantom and its scans must share.

Only fields named here are looked at. Names of scanners and of software are compared but kept as a digest: with places
and dates they would point to a person, and nobody needs them to see whether two agree.
"""

import hashlib
import re
from pathlib import Path
from typing import Any

from evenblur.images.reading import Image
from evenblur.images.sidecars import inherited_fields, read_sidecar

STATED_FIELDS = ("ReconMethodName", "ReconFilterType", "ReconFilterSize")
DEVICE_FIELDS = ("ManufacturersModelName", "SoftwareVersions", "ReconMethodImplementationVersion")
PARAMETERS = "ReconMethodParameters"
"""Iterations, subsets and the like by their label, put together from the lists of labels and values."""

_DICOM_PARAMETERS = {"NumberOfIterations": "iterations", "NumberOfSubsets": "subsets"}
_DICOM_DEVICE = {"ManufacturerModelName": "ManufacturersModelName", "SoftwareVersions": "SoftwareVersions"}
_COUNTED = re.compile(r"\b(?P<iterations>\d{1,3})\s?i\s?(?P<subsets>\d{1,3})\s?s\b", re.IGNORECASE)
_LONGEST_TEXT = 64

# Elements whose isotopes emission tomography uses.
_SYMBOLS = {
    "carbon": "C", "nitrogen": "N", "oxygen": "O", "fluorine": "F", "copper": "Cu", "gallium": "Ga", "bromine": "Br",
    "rubidium": "Rb", "yttrium": "Y", "zirconium": "Zr", "technetium": "Tc", "indium": "In", "iodine": "I",
    "xenon": "Xe", "thallium": "Tl", "lutetium": "Lu", "sodium": "Na", "germanium": "Ge", "scandium": "Sc",
    "manganese": "Mn", "titanium": "Ti", "terbium": "Tb",
}  # fmt: skip


def reconstruction_facts(image: Image, path: Path) -> dict[str, Any]:
    """Facts about the reconstruction that header or sidecar state, by the names of BIDS; the sidecar goes first.

    Parameters
    ----------
    image
        The opened image.
    path
        Its path, beside which the sidecar lies.

    Returns
    -------
    dict
        Text and numbers of `STATED_FIELDS`, the parameters by label, digests of `DEVICE_FIELDS`; only what is stated.
    """
    headers = dict(getattr(image.source, "facts", {}))
    stated = {**image.sidecar_fields, **inherited_fields(path)}
    facts = {name: stated[name] for name in STATED_FIELDS if _is_short(stated.get(name))}
    # Scanners write both into the method's name, as `OSEM 4i8s`.
    counted = _COUNTED.search(str(facts.get("ReconMethodName", "")))
    parameters = {name: float(counted[name]) for name in ("iterations", "subsets")} if counted else {}
    parameters |= {ours: headers[theirs] for theirs, ours in _DICOM_PARAMETERS.items() if theirs in headers}
    parameters |= _by_label(stated.get("ReconMethodParameterLabels"), stated.get("ReconMethodParameterValues"))
    if parameters:
        facts[PARAMETERS] = dict(sorted(parameters.items()))
    sidecar = read_sidecar(path)
    device = {ours: headers[theirs] for theirs, ours in _DICOM_DEVICE.items() if theirs in headers}
    device |= {name: sidecar[name] for name in DEVICE_FIELDS if name in sidecar}
    return facts | {name: _digest(value) for name, value in device.items() if value not in (None, "", [])}


def _is_short(value: Any) -> bool:
    if isinstance(value, list):
        return 0 < len(value) <= 8 and all(_is_short(part) for part in value)
    return value not in (None, "") and len(str(value)) <= _LONGEST_TEXT


def _by_label(labels: Any, values: Any) -> dict[str, float]:
    if not isinstance(labels, list) or not isinstance(values, list) or len(labels) != len(values):
        return {}
    pairs = [(str(label).strip().lower(), value) for label, value in zip(labels, values, strict=True)]
    return {
        label: float(value)
        for label, value in pairs
        if isinstance(value, int | float) and not isinstance(value, bool) and _is_short(label)
    }


def _digest(value: Any) -> str:
    # Without case, punctuation and the parts of a list: DICOM has several versions where a sidecar has one text.
    parts = value if isinstance(value, list) else [value]
    text = "".join(re.sub(r"[\W_]+", "", str(part).casefold()) for part in parts)
    return "sha256:" + hashlib.sha256(text.encode()).hexdigest()[:12]


def radionuclide(text: Any) -> str | None:
    """A radionuclide's name as symbol and mass number; None where the text is none.

    >>> [radionuclide(text) for text in ("F-18", "18F", "^18^Fluorine", "Tc99m", "Fluorine 18", "a name")]
    ['F18', 'F18', 'F18', 'Tc99m', 'F18', None]
    """
    if not isinstance(text, str) or len(text) > _LONGEST_TEXT:
        return None
    plain = re.sub(r"[\^\s_\[\]()-]", "", text)
    found = re.fullmatch(r"([A-Za-z]+?)(\d{1,3}m?)", plain) or re.fullmatch(r"(\d{1,3}m?)([A-Za-z]+)", plain)
    if found is None:
        return None
    mass, name = sorted(found.groups())
    symbols = {symbol.lower(): symbol for symbol in _SYMBOLS.values()} | _SYMBOLS
    symbol = symbols.get(name.lower())
    return f"{symbol}{mass}" if symbol else None


def stated_radionuclide(image: Image, path: Path) -> str | None:
    """The radionuclide that sidecar or header names; None where neither does."""
    named = (
        inherited_fields(path).get("TracerRadionuclide"),
        dict(getattr(image.source, "facts", {})).get("Radionuclide"),
    )
    return next((found for found in map(radionuclide, named) if found), None)


def stated_units(image: Image, path: Path) -> str | None:
    """The unit of the image's values that sidecar or header states; None where neither does, or in no such text."""
    units = {**image.sidecar_fields, **inherited_fields(path)}.get("Units")
    return units if isinstance(units, str) and _is_short(units) and units.isprintable() else None


def plain_units(units: str) -> str:
    """A unit without the differences of spelling that mean nothing.

    >>> plain_units("Bq/mL") == plain_units("bq / ml") == plain_units("BQML") == plain_units("Bq/cc")
    True
    >>> plain_units("kBq/mL") == plain_units("Bq/mL")
    False
    """
    text = re.sub(r"[\s*_^]", "", units).lower().replace("cc", "ml").replace("cm3", "ml")
    return {"bqml": "bq/ml", "gml": "g/ml"}.get(text, text)
