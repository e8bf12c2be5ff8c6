"""Make the images of the invented study: the same bytes at each run on one machine."""

import gzip
import hashlib
import os
from functools import lru_cache
from pathlib import Path
from typing import Any

import numpy as np

from evenblur.command import write_record
from evenblur.demonstration.blur import sample_blurred
from evenblur.demonstration.head import TISSUES, Pose, draw_head, tissue_shares
from evenblur.demonstration.noise import add_noise
from evenblur.demonstration.phantoms import cylinder_image, point_source_image
from evenblur.demonstration.scenario import (
    CAMERAS,
    GEOMETRIES,
    PHANTOM_IMAGES,
    SCAN_IMAGES,
    Camera,
    Cylinder,
    Geometry,
    PhantomImage,
    ScanImage,
    demonstration_sidecars,
)
from evenblur.images.nibabel_alone import nib
from evenblur.images.sidecars import sidecar_path

_CELL_MM = 2.5
_WORLD = {"R": (0, 1), "L": (0, -1), "A": (1, 1), "P": (1, -1), "S": (2, 1), "I": (2, -1)}
_FULL_BQ_PER_ML = 24000.0
_POINT_BQ_PER_ML = 180000.0
_STEP_BQ_PER_ML = 0.25
_FRAME_SECONDS = 300.0

REGION_LABELS = {"grey": 1, "white": 2, "deep": 3, "cerebellum": 4}
"""Tissues that the images of regions mark, with their labels."""

# Uptake relative to a full phantom's activity, in the order of TISSUES.
_UPTAKE = {
    "cortical": (1.0, 0.27, 0.05, 1.08, 0.86, 0.45, 0.05, 0.14, 1.7),
    "striatal": (0.34, 0.22, 0.06, 1.9, 0.30, 0.26, 0.08, 0.18, 1.1),
}


def make_demonstration(study_folder: Path) -> list[Path]:
    """Write every image of the invented study under `results/demonstration/`, most with a sidecar.

    Parameters
    ----------
    study_folder
        The folder that holds, or will hold, `results/`.

    Returns
    -------
    list of Path
        The images written, in the order of `scenario.demonstration_images`.

    >>> make_demonstration(Path("study"))  # doctest: +SKIP
    [PosixPath('study/results/demonstration/phantoms/quay-1-cylinder-winter.nii.gz'), ...]
    """
    written = []
    sidecars = demonstration_sidecars()
    for phantom in PHANTOM_IMAGES:
        written.append(study_folder / phantom.path)
        write_image(phantom_volume(phantom)[..., None], GEOMETRIES[phantom.setup], written[-1])
    for scan in SCAN_IMAGES:
        written.append(study_folder / scan.path)
        write_image(scan_frames(scan), GEOMETRIES[scan.setup], written[-1])
        written.append(study_folder / scan.regions_path)
        _write_regions(scan, written[-1])
    for path in written:
        name = sidecar_path(path.relative_to(study_folder)).as_posix()
        if name in sidecars:
            write_record(study_folder / name, sidecars[name].sidecar())
    return written


def sample_axes(geometry: Geometry) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Voxel centres along the scanner's x, y, z, mm, increasing; the middle of the grid is at 0.

    >>> [len(axis) for axis in sample_axes(Geometry("SPL", (50, 96, 80), (3.0, 2.0, 2.0), "int16"))]
    [80, 96, 50]
    """
    axes: dict[int, np.ndarray] = {}
    for letter, count, size in zip(geometry.directions, geometry.shape, geometry.voxel_mm, strict=True):
        axes[_WORLD[letter][0]] = (np.arange(count) - (count - 1) / 2) * size
    return axes[0], axes[1], axes[2]


def affine_of(geometry: Geometry) -> np.ndarray:
    """The 4 x 4 affine (voxel indices to mm) of a grid whose middle is at the origin.

    >>> affine_of(Geometry("LAS", (3, 3, 3), (2.0, 2.0, 4.0), "float32"))[0].tolist()
    [-2.0, 0.0, 0.0, 2.0]
    """
    affine = np.eye(4)
    affine[:3, :3] = 0.0
    for axis, letter in enumerate(geometry.directions):
        world, sign = _WORLD[letter]
        affine[world, axis] = sign * geometry.voxel_mm[axis]
        affine[world, 3] = -sign * geometry.voxel_mm[axis] * (geometry.shape[axis] - 1) / 2
    return affine


def phantom_volume(image: PhantomImage, *, noisy: bool = True) -> np.ndarray:
    """A phantom image in Bq/mL, float64, axes x, y, z increasing; without its noise if asked.

    >>> phantom_volume(PHANTOM_IMAGES[0]).shape
    (128, 128, 56)
    """
    geometry, camera = GEOMETRIES[image.setup], CAMERAS[image.setup, image.phantom_session]
    axes = sample_axes(geometry)
    shown = image.phantom_object
    if isinstance(shown, Cylinder):
        full = _FULL_BQ_PER_ML
        clean = full * cylinder_image(
            sample_axes_mm=axes,
            radius_mm=shown.radius_mm,
            length_mm=shown.length_mm,
            centre_mm=shown.centre_mm,
            tilt_deg=shown.tilt_deg,
            lean_deg=shown.lean_deg,
            in_plane_mm=camera.in_plane_mm,
            axial_mm=camera.axial_mm,
        )
    else:
        full = _POINT_BQ_PER_ML
        clean = full * point_source_image(
            sample_axes_mm=axes,
            centres_mm=shown.centres_mm,
            diameter_mm=shown.diameter_mm,
            in_plane_mm=camera.in_plane_mm,
            axial_mm=camera.axial_mm,
        )
    if not noisy:
        return clean
    generator = _generator("phantom", image.phantom)
    return _with_noise(clean, generator, geometry=geometry, camera=camera, share=image.noise, full=full)


def scan_frames(image: ScanImage, *, noisy: bool = True) -> np.ndarray:
    """A subject image in Bq/mL, float64, axes x, y, z increasing, then time frames; without its noise if asked.

    >>> scan_frames(SCAN_IMAGES[0]).shape
    (128, 128, 56, 1)
    """
    geometry, camera = GEOMETRIES[image.setup], CAMERAS[image.setup, image.phantom_session]
    axes = sample_axes(geometry)
    shares = _subject_shares(image)
    noise = _generator("noise", image.setup, image.subject, image.session)
    frames = []
    for uptake in _uptake_by_frame(image):
        activity = sum(uptake[name] * share for name, share in shares[1].items())
        clean = sample_blurred(
            np.asarray(activity),
            cell_axes_mm=shares[0],
            sample_axes_mm=axes,
            in_plane_mm=camera.in_plane_mm,
            axial_mm=camera.axial_mm,
        )
        full = max(uptake["grey"], 0.5 * uptake["deep"])
        if noisy:
            clean = _with_noise(clean, noise, geometry=geometry, camera=camera, share=image.noise, full=full)
        frames.append(clean)
    return np.stack(frames, axis=-1)


def write_image(frames: np.ndarray, geometry: Geometry, path: Path) -> None:
    """Write frames (axes x, y, z increasing, then time) as a compressed NIfTI file in the site's own array order.

    The file carries no date and no name of its own, and appears whole or not at all.
    """
    order = [_WORLD[letter][0] for letter in geometry.directions]
    stored = frames.transpose([*order, 3])
    stored = stored[tuple(slice(None, None, _WORLD[letter][1]) for letter in geometry.directions)]
    if stored.shape[3] == 1:
        stored = stored[..., 0]
    image = _integers(stored, geometry) if geometry.stored == "int16" else _floats(stored, geometry)
    image.header.set_xyzt_units("mm", "sec")
    image.set_qform(image.affine, code=1)
    image.set_sform(image.affine, code=1)
    if stored.ndim == 4:
        image.header["pixdim"][4] = _FRAME_SECONDS
    _write_packed(image, path)


def _write_packed(image: Any, path: Path) -> None:
    path.parent.mkdir(parents=True, exist_ok=True)
    temporary = path.with_name(f".{path.name}.{os.getpid()}.part")
    try:
        with temporary.open("wb") as raw, gzip.GzipFile("", "wb", 5, raw, mtime=0) as packed:
            packed.write(image.to_bytes())
        temporary.replace(path)
    finally:
        temporary.unlink(missing_ok=True)


def _floats(stored: np.ndarray, geometry: Geometry) -> Any:
    # A quarter of a becquerel is far below the noise; without the meaningless digits the file packs much smaller.
    values = np.round(stored / _STEP_BQ_PER_ML) * _STEP_BQ_PER_ML + 0.0
    return nib.Nifti1Image(np.ascontiguousarray(values, dtype=np.float32), affine_of(geometry))


def _integers(stored: np.ndarray, geometry: Geometry) -> Any:
    slope = float(np.float32(np.abs(stored).max() / 32000.0))
    image = nib.Nifti1Image(np.round(stored / slope).astype(np.int16), affine_of(geometry))
    image.header.set_slope_inter(slope, 0.0)
    return image


def _with_noise(
    clean: np.ndarray, generator: np.random.Generator, *, geometry: Geometry, camera: Camera, share: float, full: float
) -> np.ndarray:
    sizes = {_WORLD[letter][0]: size for letter, size in zip(geometry.directions, geometry.voxel_mm, strict=True)}
    return add_noise(
        clean,
        generator,
        voxel_mm=(sizes[0], sizes[1], sizes[2]),
        fwhm_mm=camera.noise_fwhm_mm,
        share=share,
        full=full,
        positive=camera.iterative,
    )


def _generator(*names: str) -> np.random.Generator:
    """Randomness that depends on the names alone, so that a new image never changes another."""
    digest = hashlib.sha256("/".join(names).encode()).digest()
    return np.random.default_rng(int.from_bytes(digest[:8], "little"))


@lru_cache(maxsize=1)
def _subject_shares(
    image: ScanImage,
) -> tuple[tuple[np.ndarray, np.ndarray, np.ndarray], dict[str, np.ndarray]]:
    """Tissue shares on a fine grid that covers the head, and beyond the field's ends where the neck goes on."""
    axes = sample_axes(GEOMETRIES[image.setup])
    placing = _generator("pose", image.setup, image.subject, image.session)
    turns = placing.uniform((-7, -3, -5), (7, 3, 5))
    offset = placing.uniform((-4, -6, -3), (4, 6, 3))
    # The couch is set so that all of the vault is in the field; the neck goes on below it.
    pose = Pose((turns[0], turns[1], turns[2]), (offset[0], offset[1], offset[2] - 6.0))
    # Thirty millimetres are over seven sigmas of the widest camera.
    bottom, top = axes[2][0] - 30.0, axes[2][-1] + 30.0
    cells = (
        np.arange(-95.0, 95.1, _CELL_MM),
        np.arange(-120.0, 120.1, _CELL_MM),
        np.arange(bottom, top + _CELL_MM, _CELL_MM),
    )
    return cells, tissue_shares(draw_head(_generator("head", image.subject)), pose=pose, axes_mm=cells)


def _write_regions(image: ScanImage, path: Path) -> None:
    """Write the subject's regions (`REGION_LABELS`) on the grid that the head was drawn on, whole or not at all."""
    cells, shares = _subject_shares(image)
    labels = np.zeros(next(iter(shares.values())).shape, dtype=np.uint8)
    for name, label in REGION_LABELS.items():
        labels[shares[name] > 0.5] = label
    affine = np.diag([_CELL_MM, _CELL_MM, _CELL_MM, 1.0])
    affine[:3, 3] = [axis[0] for axis in cells]
    made = nib.Nifti1Image(labels, affine)
    made.header.set_xyzt_units("mm", "sec")
    _write_packed(made, path)


def _uptake_by_frame(image: ScanImage) -> list[dict[str, float]]:
    """Activity (Bq/mL) of each tissue in each frame; dynamic scans start with blood flow and end with binding."""
    own = _generator("uptake", image.subject)
    dose = _FULL_BQ_PER_ML * own.uniform(0.7, 1.25)
    late = np.array(_UPTAKE[image.tracer]) * own.uniform(0.92, 1.08, len(TISSUES))
    if image.frames == 1:
        return [dict(zip(TISSUES, (dose * late).tolist(), strict=True))]
    early = np.array((0.85, 0.42, 0.10, 0.9, 0.8, 0.6, 0.12, 0.35, 1.0))
    minutes = (np.arange(image.frames) + 0.5) * _FRAME_SECONDS / 60
    # Flow washes out within ten minutes while binding builds up over about fifteen.
    flow, bound = np.exp(-minutes / 10.0), 1 - np.exp(-minutes / 15.0)
    return [
        dict(zip(TISSUES, (dose * (f * early + b * late)).tolist(), strict=True))
        for f, b in zip(flow, bound, strict=True)
    ]
