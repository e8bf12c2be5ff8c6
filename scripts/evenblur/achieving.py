"""Prove a period's kernel: smooth its own phantoms as its scans were smoothed, and measure them again."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

import evenblur
from evenblur.errors import InputError
from evenblur.images.digests import image_sha256
from evenblur.images.reading import open_image
from evenblur.measuring import PhantomVolume, load_details, measure_volume, phantom_volume, plain, width_record
from evenblur.phantoms.base import Measurement, MeasurementError
from evenblur.picture_pairs import phantom_pair
from evenblur.plan.combining import DIRECTIONS, average
from evenblur.smoothing import smooth_volume


@dataclass(frozen=True)
class ProvingPhantom:
    """A phantom of a period: its label, image, kind, details, and the directions whose width it gave."""

    label: str
    image: str
    kind: str
    details: Mapping[str, Any]
    directions: Sequence[str]
    sha256: str | None = None
    reference_sha256: str | None = None


@dataclass(frozen=True)
class LoadedPhantom:
    """A phantom of a period with its voxels, ready to be smoothed and measured as often as is needed."""

    phantom: ProvingPhantom
    scanned: PhantomVolume
    details: dict[str, Any]

    def smoothed(self, in_plane_mm: float, axial_mm: float) -> PhantomVolume:
        """The phantom after a kernel of these widths (mm), applied by the code that smooths scans."""
        smoothed = smooth_volume(
            self.scanned.volume, voxel_mm=self.scanned.voxel_mm, fwhm_mm=(in_plane_mm, in_plane_mm, axial_mm)
        )
        return PhantomVolume(np.asarray(smoothed, dtype=np.float64), self.scanned.voxel_mm)

    def measure(self, volume: PhantomVolume) -> Measurement:
        """Measure a volume as this phantom is measured.

        Raises
        ------
        MeasurementError
            If it gives no width.
        """
        return measure_volume(self.phantom.kind, volume, self.details)

    def measure_smoothed(self, in_plane_mm: float, axial_mm: float) -> Measurement:
        """Measure the phantom after a kernel of these widths (mm).

        Raises
        ------
        MeasurementError
            If the smoothed phantom gives no width.
        """
        return self.measure(self.smoothed(in_plane_mm, axial_mm))


def load_phantom(phantom: ProvingPhantom, study_dir: Path = Path()) -> LoadedPhantom:
    """Read a phantom's image and details.

    Raises
    ------
    InputError
        If an image cannot be read or changed since the run planned with it.
    """
    path = study_dir / phantom.image
    if phantom.sha256 is not None and image_sha256(path) != phantom.sha256:
        raise InputError(phantom.image, "the image changed during the run", "run again")
    scanned = phantom_volume(open_image(path, name=phantom.image))
    return LoadedPhantom(
        phantom, scanned, load_details(phantom.details, study_dir, expected_sha256=phantom.reference_sha256)
    )


def achieved_width(
    phantoms: Sequence[ProvingPhantom],
    *,
    setup: str,
    phantom_session: str,
    in_plane_mm: float,
    axial_mm: float,
    profiles_before: Mapping[str, Any] | None = None,
    study_dir: Path = Path(),
) -> dict[str, Any]:
    """Smooth a period's phantoms by its kernel and measure them again.

    Parameters
    ----------
    phantoms
        The phantoms that gave the period's widths.
    setup, phantom_session
        The period.
    in_plane_mm, axial_mm
        Its kernel, mm.
    profiles_before
        Fitted profiles of the phantoms as scanned, by label, for the report.
    study_dir
        The folder that image paths are relative to.

    Returns
    -------
    dict
        The achieved record. A direction is null where the smoothed phantom gave no width.

    Raises
    ------
    InputError
        If an image cannot be read or changed since the run planned with it.
    """
    widths: dict[str, list[tuple[float, float | None, float | None]]] = {direction: [] for direction in DIRECTIONS}
    flags: list[dict[str, Any]] = []
    profiles: dict[str, Any] = {}
    pictures: dict[str, Any] = {}
    for phantom in phantoms:
        before = (profiles_before or {}).get(phantom.label)
        loaded = load_phantom(phantom, study_dir)
        smoothed = loaded.smoothed(in_plane_mm, axial_mm)
        scanned = loaded.scanned
        pictures[phantom.label] = phantom_pair(
            np.asarray(scanned.volume, dtype=np.float64), smoothed.volume, voxel_mm=scanned.voxel_mm, kind=phantom.kind
        )
        try:
            measurement = loaded.measure(smoothed)
        except MeasurementError as error:
            flags.append({"code": "phantom_unusable", "text": f"{phantom.label}, smoothed: {error}", "value": None})
            continue
        flags += [{"code": f.code, "text": f.text, "value": plain(f.value)} for f in measurement.flags]
        profiles[phantom.label] = {"before": before, "after": plain(measurement.fit.get("profile"))}
        for direction in phantom.directions:
            record = width_record(getattr(measurement, direction))
            if record is not None:
                widths[direction].append((record["fwhm_mm"] or 0.0, record["se_mm"], record["df"]))
    return {
        "setup": setup,
        "phantom_session": phantom_session,
        "kind": ";".join(dict.fromkeys(phantom.kind for phantom in phantoms)),
        "phantoms": [phantom.label for phantom in phantoms],
        **{direction: _average(widths[direction]) for direction in DIRECTIONS},
        "kernel": {"in_plane_mm": in_plane_mm, "axial_mm": axial_mm},
        "flags": flags,
        "profiles": profiles,
        "pictures": pictures,
        "method": {"name": "smoothed phantom measured again", "version": evenblur.__version__},
    }


def _average(values: list[tuple[float, float | None, float | None]]) -> dict[str, float | None] | None:
    if not values:
        return None
    mean, error = average([(value, error) for value, error, _ in values])
    freedoms = [df for _, _, df in values if df is not None]
    return {"fwhm_mm": mean, "se_mm": error, "df": min(freedoms, default=None) if error is not None else None}
