"""Activity scale against the truth: what a uniform phantom measured over what it was filled with. Nothing is corrected.

Half-lives: ICRP Publication 107, Nuclear Decay Data for Dosimetric Calculations (2008).
"""

import datetime
from collections.abc import Mapping
from typing import Any

HALF_LIFE_S = {
    "C11": 20.39 * 60,
    "N13": 9.965 * 60,
    "O15": 122.24,
    "F18": 109.77 * 60,
    "Cu64": 12.700 * 3600,
    "Ga68": 67.71 * 60,
    "Ge68": 270.95 * 86400,
    "Zr89": 78.41 * 3600,
    "Tc99m": 6.015 * 3600,
    "In111": 2.8047 * 86400,
    "I123": 13.27 * 3600,
    "I124": 4.1760 * 86400,
    "Lu177": 6.647 * 86400,
    "Y90": 64.10 * 3600,
}
"""Half-lives in seconds by radionuclide."""

KBQ_ML_PER_UNIT = {"bq/ml": 0.001, "bqml": 0.001, "kbq/ml": 1.0, "mbq/ml": 1000.0, "bq/cc": 0.001, "kbq/cc": 1.0}
"""Units of activity concentration, in lower case, as kBq/mL."""

Record = Mapping[str, Any]


def radionuclide_key(name: str) -> str | None:
    """The key of `HALF_LIFE_S` for a radionuclide as people write it; None where it is not listed.

    >>> radionuclide_key("F-18"), radionuclide_key("18F"), radionuclide_key("tc-99m"), radionuclide_key("U235")
    ('F18', 'F18', 'Tc99m', None)
    """
    plain = "".join(sign for sign in name if sign.isalnum()).lower()
    for key in HALF_LIFE_S:
        letters = key.rstrip("m0123456789").lower() if key != "Tc99m" else "tc"
        numbers = key.lower()[len(letters) :]
        if plain in (letters + numbers, numbers + letters):
            return key
    return None


def decayed(kbq_ml: float, *, seconds: float, half_life_s: float) -> float:
    """Activity concentration (kBq/mL) after this time; a negative time goes back.

    >>> decayed(20.0, seconds=3600.0, half_life_s=3600.0)
    10.0
    """
    return float(kbq_ml * 2.0 ** (-seconds / half_life_s))


def scale_entry(
    *,
    phantom: str,
    period: str,
    details: Record,
    radionuclide: str | None,
    inside: float | None,
    units: str | None,
    sidecar: Record,
    acquired: datetime.date,
) -> dict[str, Any]:
    """Measured over true activity concentration of a uniform phantom, or why it was not computed.

    Parameters
    ----------
    phantom, period
        Labels.
    details
        `true_kbq_ml` at `reference_time`, and optionally `image_time`, the time that the image's values refer to.
    radionuclide
        What it was filled with.
    inside
        The fitted level inside it, in the image's unit.
    units
        The image's unit, by its header or sidecar.
    sidecar
        BIDS fields of the sidecar: `TimeZero`, `ImageDecayCorrected`, `ImageDecayCorrectionTime`; taken where the
        details give no `image_time`.
    acquired
        Day of the scan.

    Returns
    -------
    dict
        `phantom`, `period`, `measured_kbq_ml`, `true_kbq_ml` (decayed to the image's time), `ratio`, `why`.
    """
    entry: dict[str, Any] = {"phantom": phantom, "period": period, "measured_kbq_ml": None, "true_kbq_ml": None}
    entry |= {"ratio": None, "why": None}
    factor = KBQ_ML_PER_UNIT.get(str(units or "").replace(" ", "").lower())
    if inside is None:
        return {**entry, "why": "the phantom gave no level inside it"}
    if factor is None:
        told = f"the image's unit is {units}" if units else "neither header nor sidecar tells the image's unit"
        return {**entry, "why": f"{told}, and only Bq/mL, kBq/mL and MBq/mL can be compared"}
    entry["measured_kbq_ml"] = float(f"{inside * factor:.6g}")
    true = float(details["true_kbq_ml"])
    reference = details.get("reference_time")
    if reference is None:
        return {**entry, "why": "the details give no reference_time of true_kbq_ml"}
    key = radionuclide_key(radionuclide or "")
    if key is None:
        told = f"{radionuclide} has no half-life in the list" if radionuclide else "the table names no radionuclide"
        return {**entry, "why": told}
    at, why = _image_time(details, sidecar, acquired)
    if at is None:
        return {**entry, "why": why}
    seconds = (at - datetime.datetime.fromisoformat(str(reference))).total_seconds()
    entry["true_kbq_ml"] = float(f"{decayed(true, seconds=seconds, half_life_s=HALF_LIFE_S[key]):.6g}")
    if not entry["true_kbq_ml"] > 0:
        return {**entry, "why": "nothing of the filling was left at the image's time"}
    return {**entry, "ratio": round(entry["measured_kbq_ml"] / entry["true_kbq_ml"], 4)}


def _image_time(
    details: Record, sidecar: Record, acquired: datetime.date
) -> tuple[datetime.datetime | None, str | None]:
    """The time that the image's values refer to."""
    if details.get("image_time") is not None:
        return datetime.datetime.fromisoformat(str(details["image_time"])), None
    zero, offset = sidecar.get("TimeZero"), sidecar.get("ImageDecayCorrectionTime")
    if sidecar.get("ImageDecayCorrected") is not True or not isinstance(zero, str) or not _is_number(offset):
        return None, (
            "the details give no image_time, and no sidecar tells TimeZero and ImageDecayCorrectionTime of a decay-"
            "corrected image"
        )
    try:
        start = datetime.time.fromisoformat(zero)
    except ValueError:
        return None, "the sidecar's TimeZero is no time of day"
    day = datetime.datetime.combine(acquired, start.replace(tzinfo=None))
    return day + datetime.timedelta(seconds=float(offset or 0.0)), None


def _is_number(value: Any) -> bool:
    return isinstance(value, int | float) and not isinstance(value, bool)
