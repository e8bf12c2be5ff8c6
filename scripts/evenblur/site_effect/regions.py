"""Means of regions in a scan before and after harmonisation."""

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from evenblur.errors import InputError
from evenblur.images.digests import image_sha256
from evenblur.images.reading import Image, open_image

FEWEST_VOXELS = 8
"""A region of fewer voxels gives no mean that could be compared."""

Place = Mapping[str, Any]


def region_means(
    before: Path,
    after: Path,
    *,
    places: Sequence[Place],
    study_dir: Path = Path(),
    expected: Mapping[str, str] | None = None,
    name: str | None = None,
) -> dict[str, dict[str, Any]]:
    """Mean of every region in a scan and in its harmonised image.

    Parameters
    ----------
    before, after
        The scan and its harmonised image.
    places
        Where the regions lie: `region` with `image` and `value`, or with `centre_mm` and `diameter_mm` (mm, in the
        scan's own space). Places of one name are taken together.
    study_dir
        The folder that the regions' images are relative to.
    expected
        Identities (SHA-256) that the scan and the regions' images must have, by path.
    name
        How messages call the scan.

    Returns
    -------
    dict
        By region: `voxels`, `before`, `after`, `why` (a sentence where there is no mean).

    Raises
    ------
    InputError
        If the scan or its harmonised image cannot be read, or a region's image changed since the run planned with it.

    Notes
    -----
    A voxel belongs to a region if its centre lies in a marked voxel of the label image, or within the sphere. A dynamic
    scan counts with the plain mean of its frames; voxels without a value are left out.
    """
    name = name or before.as_posix()
    scan = open_image(before, name=name)
    _see_that_it_is_the_same(before, name, expected or {})
    made = open_image(after)
    if scan.grid.shape != made.grid.shape:
        raise InputError(str(after), "has another grid than its scan", "delete it and run again")
    centres = _voxel_centres(scan)
    means = [_mean_frame(image) for image in (scan, made)]
    found: dict[str, dict[str, Any]] = {}
    for region in dict.fromkeys(str(place["region"]) for place in places):
        parts = [place for place in places if place["region"] == region]
        try:
            marked = np.zeros(scan.grid.shape, dtype=bool)
            for place in parts:
                marked |= _marked(place, centres, study_dir, expected or {})
        except InputError as error:
            if error.code is None:
                raise
            found[region] = _none(0, f"{error.what}; {error.mend}")
            continue
        usable = marked & np.isfinite(means[0]) & np.isfinite(means[1])
        voxels = int(usable.sum())
        if voxels < FEWEST_VOXELS:
            found[region] = _none(voxels, f"only {voxels} voxels of the scan lie in it")
            continue
        values = [float(f"{mean[usable].mean():.8g}") for mean in means]
        found[region] = {"voxels": voxels, "before": values[0], "after": values[1], "why": None}
    return found


def _see_that_it_is_the_same(path: Path, name: str, expected: Mapping[str, str]) -> None:
    if name in expected and image_sha256(path) != expected[name]:
        raise InputError(name, "the image changed during the run", "run again")


def _none(voxels: int, why: str) -> dict[str, Any]:
    return {"voxels": voxels, "before": None, "after": None, "why": why}


def _affine_mm(image: Image) -> NDArray[np.float64]:
    """The affine in millimetres: a header may count in other units, which the grid has brought to mm."""
    affine = np.array(image.source.affine, dtype=np.float64)
    affine[:3] *= image.grid.voxel_mm[0] / np.linalg.norm(affine[:3, 0])
    return affine


def _voxel_centres(image: Image) -> NDArray[np.float64]:
    """Centres of all voxels in the world's mm, shape (x, y, z, 3)."""
    affine = _affine_mm(image)
    index = np.stack(np.meshgrid(*(np.arange(n) for n in image.grid.shape), indexing="ij"), axis=-1)
    return np.asarray(index @ affine[:3, :3].T + affine[:3, 3])


def _mean_frame(image: Image) -> NDArray[np.float64]:
    total = image.frame(0)
    for index in range(1, image.frames):
        total = total + image.frame(index)
    return np.asarray(total / image.frames)


def _marked(
    place: Place, centres: NDArray[np.float64], study_dir: Path, expected: Mapping[str, str]
) -> NDArray[np.bool_]:
    if place.get("image") is None:
        distance = np.linalg.norm(centres - np.array(place["centre_mm"], dtype=float), axis=-1)
        return np.asarray(distance <= float(place["diameter_mm"]) / 2.0)
    name = str(place["image"])
    path = study_dir / name
    labels = open_image(path, name=name)
    _see_that_it_is_the_same(path, name, expected)
    values = labels.frame(0)
    back = np.linalg.inv(_affine_mm(labels))
    index = np.rint(centres @ back[:3, :3].T + back[:3, 3]).astype(np.int64)
    inside = np.all((index >= 0) & (index < np.array(values.shape)), axis=-1)
    seen = np.zeros(inside.shape)
    seen[inside] = values[tuple(index[inside].T)]
    wanted = place.get("value")
    return np.asarray(inside & (np.rint(seen) == wanted if wanted is not None else seen > 0))
