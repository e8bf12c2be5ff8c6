"""Harmonise a scan: smooth every frame of an image file by a period's kernel, and write the record with it."""

import hashlib
import platform
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import isal
import numpy as np
import scipy  # its top alone, which nibabel loads as well: its parts take a job's start longer than the smoothing

from evenblur import __version__
from evenblur.command import write_record
from evenblur.errors import InputError
from evenblur.images.digests import image_sha256
from evenblur.images.grid import Grid
from evenblur.images.nibabel_alone import nib
from evenblur.images.reading import open_image
from evenblur.images.sidecars import inherited_fields
from evenblur.images.streaming import iter_frames_float32
from evenblur.images.writing import MARK, FrameWriter, output_header
from evenblur.smoothing import Smoothing, plan_smoothing, smooth_volume

OBLIQUE_LIMIT_DEG = 2.0
"""Up to this tilt between grid and bed the two directions are taken as the array axes."""

OBLIQUE_WIDTH_AGREEMENT = 0.01
"""A more tilted grid is used if the two widths agree to this share: then the kernel has no direction."""

END_ACTIVITY_SHARE = 0.01
"""From this share of the activity on, activity near an axial end of the field is flagged."""


def check_kernel_fits(grid: Grid, *, in_plane_mm: float, axial_mm: float, name: str) -> None:
    """Refuse a kernel that a voxel grid cannot take.

    Parameters
    ----------
    grid
        The scan's grid.
    in_plane_mm, axial_mm
        Widths of the kernel, mm.
    name
        How the message calls the image.

    Raises
    ------
    InputError
        With code `oblique_grid` or `too_few_slices`, or without a code if a width is negative or not finite.

    >>> from evenblur.images.grid import grid_from_affine
    >>> check_kernel_fits(grid_from_affine(np.eye(4), (9, 9, 9)), in_plane_mm=4.0, axial_mm=5.0, name="a.nii")
    """
    for words, width in (("in-plane", in_plane_mm), ("axial", axial_mm)):
        if not (np.isfinite(width) and width >= 0):
            raise InputError(name, f"the {words} width {width} mm is not a width", "give 0 or more")
    apart = abs(in_plane_mm - axial_mm)
    if grid.oblique_deg > OBLIQUE_LIMIT_DEG and apart > OBLIQUE_WIDTH_AGREEMENT * max(in_plane_mm, axial_mm):
        what = (
            f"the voxel grid is tilted by {grid.oblique_deg:.1f} degrees against the bed, "
            f"and the widths {in_plane_mm:g} mm in-plane and {axial_mm:g} mm axial differ"
        )
        raise InputError(name, what, "send the image on the scanner's own grid", "oblique_grid")
    slices, thickness = grid.shape[grid.axial_axis], grid.voxel_mm[grid.axial_axis]
    if axial_mm > 0 and slices * thickness < axial_mm:
        what = f"{slices} slices of {thickness:g} mm are fewer than the axial kernel of {axial_mm:g} mm needs"
        raise InputError(name, what, "send the whole volume", "too_few_slices")


def axial_end_weights(slices: int, *, thickness_mm: float, zone_mm: float) -> np.ndarray:
    """Share of each slice that lies within a distance of either axial end of the field.

    Parameters
    ----------
    slices
        Number of slices.
    thickness_mm
        Thickness of a slice, mm.
    zone_mm
        The distance from the outer faces, mm.

    Returns
    -------
    np.ndarray
        `slices` float64 shares from 0 to 1.

    >>> axial_end_weights(5, thickness_mm=2.0, zone_mm=3.0).tolist()
    [1.0, 0.5, 0.0, 0.5, 1.0]
    """
    from_start = np.clip(zone_mm / thickness_mm - np.arange(slices), 0.0, 1.0)
    return np.minimum(from_start + from_start[::-1], 1.0)


def harmonise_scan(
    image: Path,
    *,
    in_plane_mm: float,
    axial_mm: float,
    out: Path,
    record: Path,
    expected_sha256: str | None = None,
    facts: dict[str, Any] | None = None,
    code_token: str | None = None,
) -> dict[str, Any]:
    """Smooth a scan and write the harmonised image with its record: both whole, or neither.

    Every frame gets the same kernel. Memory holds a few frames, however many there are.

    Parameters
    ----------
    image
        The scan: any 3-D or 4-D file that nibabel reads, or a folder with one DICOM series.
    in_plane_mm, axial_mm
        Widths of the kernel across and along the bed, mm; 0 leaves a direction alone.
    out
        Where the image goes, `.nii` or `.nii.gz`: float32, scale 1, the input's geometry.
    record
        Where the record goes, a BIDS sidecar with a block `Evenblur`.
    expected_sha256
        SHA-256 (hex) that the file must have.
    facts
        What the record should say beyond what is seen here: `Sources` (BIDS URIs) and any entries for the block,
        among them `target` with `axial_mm`, the width of the zone in which activity at an axial end is flagged (the
        kernel's axial width without it).
    code_token
        Hash of the smoothing code, part of `smoothing_version`.

    Returns
    -------
    dict
        The record as written.

    Raises
    ------
    InputError
        If the image cannot be read or used, changed during the run, or a target's name is of no use; with a hold
        reason as code where the scan is to be held.

    >>> import tempfile
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     scan, out = Path(folder) / "a.nii", Path(folder) / "b.nii.gz"
    ...     nib.save(nib.Nifti1Image(np.ones((8, 8, 8), np.float32), np.diag([2, 2, 2, 1])), scan)
    ...     done = harmonise_scan(scan, in_plane_mm=6.0, axial_mm=5.0, out=out, record=Path(folder) / "b.json")
    ...     done["Evenblur"]["total_before_ml"], round(done["Evenblur"]["total_after_ml"], 4)
    (4.096, 4.096)
    """
    facts = dict(facts or {})
    _check_targets(image, out, record)
    opened = open_image(image)
    grid = opened.grid
    check_kernel_fits(grid, in_plane_mm=in_plane_mm, axial_mm=axial_mm, name=opened.name)
    widths = grid.widths_by_axis(in_plane_mm, axial_mm)
    plan = plan_smoothing(grid.shape, voxel_mm=grid.voxel_mm, fwhm_mm=widths)
    before = _stamp(image)
    input_sha256 = image_sha256(image)
    if expected_sha256 is not None and input_sha256 != expected_sha256.lower():
        raise _changed(opened.name)
    seen = _Seen(grid)
    with FrameWriter(out, output_header(opened, mark=MARK)) as writer:
        for frame in iter_frames_float32(opened):
            smoothed = smooth_volume(frame, voxel_mm=grid.voxel_mm, fwhm_mm=widths)
            seen.add(frame, smoothed)
            writer.write(smoothed)
            del smoothed
        output_sha256 = writer.finish()
        if _stamp(image) != before:
            raise _changed(opened.name)
        block = {
            "kernel": {"in_plane_mm": float(in_plane_mm), "axial_mm": float(axial_mm)},
            **_kernel_entries(plan),
            "voxel_mm": list(grid.voxel_mm),
            "axial_axis": grid.axial_axis,
            "oblique_deg": grid.oblique_deg,
            "frames": opened.frames,
            **seen.entries(),
            "input": {
                "path": image.name if image.is_absolute() else image.as_posix(),
                "sha256": input_sha256,
                "voxels_sha256": seen.before_digest.hexdigest(),
            },
            "output": {"sha256": output_sha256, "voxels_sha256": seen.after_digest.hexdigest()},
            "smoothing_version": f"{__version__}+{code_token}" if code_token else __version__,
            "versions": {
                "python": platform.python_version(),
                "numpy": np.__version__,
                "scipy": scipy.__version__,
                "nibabel": nib.__version__,
                "isal": isal.__version__,
            },
            "flags": seen.flags(in_plane_mm, axial_mm, _end_zone_mm(facts, axial_mm)),
        }
        sources = {"Sources": facts.pop("Sources")} if "Sources" in facts else {}
        written = {
            "Description": _description(in_plane_mm, axial_mm),
            **sources,
            "SkullStripped": False,
            **opened.sidecar_fields,
            **inherited_fields(image),
            "Evenblur": {**block, **{key: value for key, value in facts.items() if key not in block}},
        }
        # Without its old record a new image can never stand beside a record of another one.
        record.unlink(missing_ok=True)
        writer.keep()
        try:
            write_record(record, written)
        except BaseException:
            out.unlink(missing_ok=True)
            raise
    return written


@dataclass
class _Seen:
    """What is learnt from the frames as they pass."""

    grid: Grid
    totals: list[float] = field(default_factory=lambda: [0.0, 0.0])
    maxima: list[float] = field(default_factory=lambda: [-np.inf, -np.inf])
    nan_voxels: int = 0

    def __post_init__(self) -> None:
        self.slices = np.zeros(self.grid.shape[self.grid.axial_axis])
        self.before_digest = hashlib.sha256()
        self.after_digest = hashlib.sha256()

    def add(self, frame: np.ndarray, smoothed: np.ndarray) -> None:
        flat = frame.reshape(-1, order="F")
        valid: Any = True
        if np.isnan(np.dot(flat, flat)):  # the quick look: a product with a NaN is one
            valid = ~np.isnan(frame)
            self.nan_voxels += int(frame.size - np.count_nonzero(valid))
        by_slice = frame.sum(axis=self.grid.in_plane_axes, dtype=np.float64, where=valid)
        self.slices += by_slice
        self.totals[0] += float(by_slice.sum())
        self.totals[1] += float(smoothed.sum(dtype=np.float64, where=valid))
        for index, (values, digest) in enumerate(((frame, self.before_digest), (smoothed, self.after_digest))):
            self.maxima[index] = max(self.maxima[index], float(values.max(initial=-np.inf, where=valid)))
            digest.update(np.asarray(values, dtype="<f4").reshape(-1, order="F").data)

    def entries(self) -> dict[str, Any]:
        """Totals (sum x voxel volume in mL, all frames), maxima and the number of NaN voxels, for the record."""
        before, after = (_nine_digits(total * self.grid.voxel_ml) for total in self.totals)
        highest = [_nine_digits(value) if np.isfinite(value) else None for value in self.maxima]
        return {
            "total_before_ml": before,
            "total_after_ml": after,
            "maximum_before": highest[0],
            "maximum_after": highest[1],
            "nan_voxels": self.nan_voxels,
        }

    def flags(self, in_plane_mm: float, axial_mm: float, zone_mm: float) -> list[dict[str, Any]]:
        flags: list[dict[str, Any]] = []
        if self.nan_voxels:
            text = f"{self.nan_voxels} voxels hold no value: they stay so, and totals are not kept around them"
            flags.append({"code": "nan_voxels", "text": text, "value": self.nan_voxels})
        if self.grid.oblique_deg > OBLIQUE_LIMIT_DEG:
            text = f"the voxel grid is tilted by {self.grid.oblique_deg:.1f} degrees; both kernel widths agree"
            flags.append({"code": "oblique_grid_used", "text": text, "value": self.grid.oblique_deg})
        thickness = self.grid.voxel_mm[self.grid.axial_axis]
        activity = np.maximum(self.slices, 0.0)
        weights = axial_end_weights(len(activity), thickness_mm=thickness, zone_mm=zone_mm)
        total = float(activity.sum())
        share = float(weights @ activity) / total if total > 0 else 0.0
        if axial_mm > 0 and share > END_ACTIVITY_SHARE:
            text = (
                f"{100 * share:.1f} % of the activity lies within {zone_mm:g} mm of an axial end of the field, "
                "beyond which its mirror image is assumed"
            )
            flags.append({"code": "activity_at_axial_end", "text": text, "value": round(share, 4)})
        return flags


def _check_targets(image: Path, out: Path, record: Path) -> None:
    if not out.name.endswith((".nii", ".nii.gz")):
        raise InputError(str(out), "is no name for a NIfTI image", "let it end in .nii or .nii.gz")
    for target in (out, record):
        if image.exists() and target.exists() and image.samefile(target):
            raise InputError(str(target), "is the scan itself", "give the result another name")
        if image.is_dir() and image.resolve() in target.resolve().parents:
            raise InputError(str(target), "lies in the scan's own folder", "write the result elsewhere")
    if out == record:
        raise InputError(str(record), "is the name of both image and record", "give them two names")


def _kernel_entries(plan: Smoothing) -> dict[str, Any]:
    return {
        "applied_fwhm_mm_by_array_axis": list(plan.fwhm_mm),
        "route": " ".join(plan.route),
        "largest_negative_lobe": plan.facts.largest_negative_lobe,
        "noise_variance_factor": plan.facts.noise_variance_factor,
    }


def _description(in_plane_mm: float, axial_mm: float) -> str:
    if in_plane_mm == 0 and axial_mm == 0:
        return "Harmonised in resolution: at the study's common width already, so no smoothing was applied."
    return (
        f"Harmonised in resolution: smoothed by a Gaussian of {in_plane_mm:g} mm in-plane and {axial_mm:g} mm axial "
        "full width at half maximum. Activity scale was not harmonised."
    )


def _end_zone_mm(facts: dict[str, Any], axial_mm: float) -> float:
    target = facts.get("target")
    width = target.get("axial_mm") if isinstance(target, dict) else None
    return float(width) if isinstance(width, int | float) else axial_mm


def _stamp(path: Path) -> list[tuple[str, int, int]]:
    """Size and date of a file, or of every file of a folder."""
    files = sorted(part for part in path.rglob("*") if part.is_file()) if path.is_dir() else [path]
    return [(part.as_posix(), part.stat().st_size, part.stat().st_mtime_ns) for part in files]


def _changed(name: str) -> InputError:
    return InputError(name, "changed during the run", "run again")


def _nine_digits(value: float) -> float:
    return float(f"{value:.9g}")
