"""The study itself against its bag: identities of all images, nothing astray, and scans smoothed a second time."""

import hashlib
import os
import random
from pathlib import Path
from typing import Any

import numpy as np

from evenblur.check.bags import file_sha256
from evenblur.check.findings import DisagreementError
from evenblur.check.fourier import SIGMA_OF_FWHM, smooth
from evenblur.check.handover import Handover, entities, inside, output_path
from evenblur.check.periods import Period
from evenblur.check.volumes import UnreadableError, Volume, read_series

TOLERANCE = 1e-5
"""Largest difference of a voxel, as a share of the image's maximum."""

_PAIRS = ((".hdr", ".img", ".mat"), (".head", ".brik"), (".par", ".rec"))


def identity(path: Path) -> str:
    """SHA-256 (hex) of an image: of a file's bytes, or of sorted lines `name NUL hash` where it has several files."""
    if path.is_dir():
        files = sorted(p for p in path.rglob("*") if p.is_file())
        lines = sorted(f"{p.relative_to(path).as_posix()}\0{file_sha256(p)}\n" for p in files)
        return hashlib.sha256("".join(lines).encode()).hexdigest()
    plain = path.name.lower().removesuffix(".gz").removesuffix(".bz2")
    for endings in _PAIRS:
        if plain.endswith(endings):
            stem = plain[: plain.rindex(".")]
            names = {stem + ending + packed for ending in endings for packed in ("", ".gz", ".bz2")}
            files = sorted({path, *(p for p in path.parent.iterdir() if p.name.lower() in names)})
            if len(files) > 1:
                return hashlib.sha256("".join(f"{p.name}\0{file_sha256(p)}\n" for p in files).encode()).hexdigest()
    return file_sha256(path)


def check_results(bag: Handover, study: Path) -> int:
    """Compare the bag's copies of records, tables and history with the study's own files, byte for byte."""
    count = 0
    root = bag.data / "results"
    names = [Path(folder, name).relative_to(root).as_posix() for folder, _, files in os.walk(root) for name in files]
    pairs = [(root / name, f"{bag.settings['results']}/{name}") for name in sorted(names)]
    pairs.append((bag.data / "history.tsv", "history.tsv"))
    for copy, name in pairs:
        own = study / name
        if copy.is_file() and own.is_file():
            count += 1
            if own.read_bytes() != copy.read_bytes():
                raise DisagreementError(name, "differs from its copy in the bag: the study went on, or one was changed")
    return count


def check_identities(bag: Handover, study: Path) -> int:
    """Hash every original and every harmonised image, and look for files that no accepted row stands for."""
    count = 0
    folder = study / bag.settings["results"] / "harmonised"
    outputs = {output_path(bag.rows[key], bag.settings): record for key, record in bag.scan_records.items()}
    known = {"dataset_description.json", ".bidsignore", "README", "README.md"}
    allowed = {f"{bag.settings['results']}/harmonised/{name}" for name in known}
    allowed |= {name for image in outputs for name in (image, image.removesuffix(".nii.gz") + ".json")}
    for place, _, files in os.walk(folder):
        for file in files:
            name = Path(place, file).relative_to(study).as_posix()
            if name not in allowed:
                raise DisagreementError(name, "lies among the harmonised images, and no accepted scan stands for it")
    for name, record in outputs.items():
        count += _same_file(study, name, record["output"]["sha256"])
    for row in bag.phantoms:
        count += _same_file(study, row["image"], bag.phantom_intake[row["phantom"]]["sha256"])
        expected = bag.resolution.get(row["phantom"], {}).get("input", {}).get("reference_sha256")
        if expected is not None:
            count += _same_file(study, row["details"]["reference"], expected)
    for row in bag.scans:
        count += _same_file(study, row["image"], bag.scan_intake[entities(row)]["sha256"])
    return count


def _same_file(study: Path, name: str, expected: str | None) -> int:
    if expected is None:
        return 0
    try:
        found = identity(study / name)
    except OSError:
        raise DisagreementError(name, "is not there or cannot be read") from None
    if found != expected:
        raise DisagreementError(name, "is another image than the records name")
    return 1


def check_packed_images(bag: Handover) -> int:
    """Compare harmonised images in the bag with their records."""
    count = 0
    for row in bag.scans:
        record = bag.scan_records.get(entities(row))
        name = inside(output_path(row, bag.settings), bag.settings)
        if record is not None and (bag.data / name).is_file():
            count += _same_file(bag.data, name, record["output"]["sha256"])
    return count


def check_packed_phantoms(bag: Handover) -> int:
    """Compare the voxels of the phantoms in the bag with those that were taken in."""
    count = 0
    for row in bag.phantoms:
        intake = bag.phantom_intake[row["phantom"]]
        if intake["voxels_sha256"] is None:
            continue
        name = f"phantoms/{row['phantom']}.nii.gz"
        digest = hashlib.sha256()
        try:
            volume = Volume(bag.data / name)
            for frame in volume.read():
                digest.update(frame.astype("<f4").tobytes(order="F"))
        except Exception as error:  # nibabel's readers raise many kinds of error
            raise DisagreementError(name, f"cannot be read ({type(error).__name__})") from None
        if digest.hexdigest() != intake["voxels_sha256"]:
            raise DisagreementError(name, "holds other voxels than those that were taken in")
        sizes = [round(float(size), 6) for size in volume.voxel_mm]
        if not np.allclose(sizes, intake["voxel_mm"], rtol=1e-5):
            raise DisagreementError(name, "has other voxel sizes than the intake record")
        count += 1
    return count


def drawn(bag: Handover, sample: int, seed: int) -> list[str]:
    """Accepted scans drawn at random, the same ones for the same seed."""
    keys = sorted(bag.scan_records)
    return sorted(random.Random(seed).sample(keys, min(sample, len(keys))))


def smooth_again(bag: Handover, study: Path, periods: dict[str, Period], key: str) -> tuple[float | None, str]:
    """Smooth one scan again from its original.

    Returns
    -------
    difference, note
        The largest difference to the harmonised image as a share of the image's maximum; None with a note where this
        route does not read the original.

    Raises
    ------
    DisagreementError
        If grids differ, or any voxel differs by more than the tolerance.
    """
    row, planned = bag.rows[key], bag.planned_scans[key]
    period = periods[f"{row['setup']}.{planned['phantom_session']}"]
    name = output_path(row, bag.settings)
    try:
        output, original = Volume(study / name), study / row["image"]
        frames: Any = read_series(original, output) if original.is_dir() else _same_grid(Volume(original), output, key)
        axial, across = period.kernel["axial"] or 0.0, period.kernel["in_plane"] or 0.0
        widths = [axial if axis == output.axial else across for axis in range(3)]
        first, second, third = (w * SIGMA_OF_FWHM / s for w, s in zip(widths, output.voxel_mm, strict=True))
        apart, highest = 0.0, 0.0
        for before, found in zip(frames, output.read(), strict=True):
            # Images are read in single precision, as they are written.
            expected = smooth(before.astype(np.float32).astype(float), (first, second, third))
            if not np.array_equal(np.isnan(expected), np.isnan(found)):
                raise DisagreementError(key, "has voxels without a value elsewhere than its original")
            apart = max(apart, float(np.nanmax(np.abs(expected - found), initial=0.0)))
            highest = max(highest, float(np.nanmax(np.abs(expected), initial=0.0)))
    except UnreadableError as error:
        return None, str(error)
    except DisagreementError:
        raise
    except Exception as error:  # readers raise many kinds of error
        raise DisagreementError(key, f"its images cannot be compared ({type(error).__name__})") from None
    share = apart / highest if highest > 0 else apart
    if share > TOLERANCE:
        what = f"smoothed again it differs by {share:.1e} of its maximum, and {TOLERANCE:g} is allowed"
        raise DisagreementError(key, what)
    return share, ""


def _same_grid(original: Volume, output: Volume, key: str) -> Any:
    if original.shape != output.shape or original.frames != output.frames:
        raise DisagreementError(key, "the harmonised image has another shape than its original")
    if not np.allclose(original.affine, output.affine, rtol=1e-5, atol=1e-4):
        raise DisagreementError(key, "the harmonised image has another geometry than its original")
    return original.read()
