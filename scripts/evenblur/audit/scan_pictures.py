"""Mid-slices of a few scans before and after smoothing, for the report."""

from collections.abc import Iterable
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from evenblur.command import read_record
from evenblur.errors import InputError
from evenblur.images.reading import Image, open_image
from evenblur.picture_pairs import pair_record
from evenblur.study.pictured import pictured_scans
from evenblur.study.reading import load_study
from evenblur.study.records import Layout


def scan_pictures(scans: Iterable[tuple[str, str, str]], *, study_dir: Path) -> dict[str, Any]:
    """The middle axial slice of each scan before and after smoothing, on one scale.

    Parameters
    ----------
    scans
        Entities, path of the scan, path of its harmonised image; paths relative to the study folder.
    study_dir
        The study folder.

    Returns
    -------
    dict
        By entities, what `picture_pairs.pair_record` returns. Of a dynamic scan the middle frame is shown.

    Raises
    ------
    InputError
        If an image cannot be read, or the two do not lie on one grid.
    """
    found = {}
    for entities, scan, harmonised in scans:
        before, after = (open_image(study_dir / name, name=name) for name in (scan, harmonised))
        if before.grid.shape != after.grid.shape or before.frames != after.frames:
            raise InputError(harmonised, "lies on another grid than its scan", "delete it and run again")
        found[entities] = _pair(before, after)
    return found


def pictures_of_study(study_dir: Path) -> tuple[Path, dict[str, Any]]:
    """The results folder of a study, and the pictures of the scans that its report shows.

    Raises
    ------
    InputError
        If the study's files, its plan or an image cannot be used.
    """
    study = load_study(study_dir)
    layout = Layout(study)
    plan = read_record(study_dir / layout.plan)
    rows = {row.entities: row for row in study.scans}
    chosen = pictured_scans(plan["scans"], {row.setup: row.site for row in study.setups})
    scans = [(key, rows[key].image, layout.harmonised_image(rows[key])) for key in chosen if key in rows]
    return study_dir / layout.results, scan_pictures(scans, study_dir=study_dir)


def _pair(before: Image, after: Image) -> dict[str, Any]:
    frame, grid = before.frames // 2, before.grid
    at = grid.shape[grid.axial_axis] // 2
    views = [_view(image.frame(frame), image, at) for image in (before, after)]
    across = int(np.argmax(np.abs(np.asarray(before.source.affine)[0, list(grid.in_plane_axes)])))
    sizes = [grid.voxel_mm[axis] for axis in grid.in_plane_axes]
    label = f"Axial slice {at + 1} of {grid.shape[grid.axial_axis]}"
    if before.frames > 1:
        label += f", frame {frame + 1} of {before.frames}"
    return pair_record(views[0], views[1], pixel_mm=(sizes[across], sizes[1 - across]), label=label, cut=True)


def _view(volume: NDArray[np.float64], image: Image, at: int) -> NDArray[np.float64]:
    """An axial slice as it is looked at from the feet: the right of the world at the left, its front on top."""
    grid = image.grid
    plane = np.take(volume, at, axis=grid.axial_axis)
    directions = np.asarray(image.source.affine, dtype=float)[:2, list(grid.in_plane_axes)]
    if np.argmax(np.abs(directions[0])) == 0:
        plane, directions = plane.T, directions[:, ::-1]
    # Rows now run along y, columns along x; the world's x grows to the right of the one who lies there.
    if directions[1, 0] > 0:
        plane = plane[::-1]
    if directions[0, 1] > 0:
        plane = plane[:, ::-1]
    return np.asarray(plane, dtype=np.float64)
