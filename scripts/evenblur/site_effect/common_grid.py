"""The same points of the same object in every image of a phantom, wherever it lay and on whatever grid.

The object's own frame comes from the fitted pose: nothing is registered again. Values between voxels come from cubic
splines, which blur far less than straight lines do (those add up to a quarter of a squared voxel to the variance).
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage
from scipy.spatial.transform import Rotation

from evenblur.measuring import PhantomVolume
from evenblur.phantoms.reference_model import ReferenceModel
from evenblur.phantoms.rigid import AXIS_NAMES, Motion

Array = NDArray[np.float64]

MOST_POINTS = 60_000
"""Points of a common grid; a finer grid tells nothing more and costs memory for every site."""


class NotComparableError(ValueError):
    """A phantom image that cannot be laid on the common grid; the message says why."""


@dataclass(frozen=True)
class CommonObject:
    """The points of an object that are compared.

    Attributes
    ----------
    points
        In the object's own frame, mm, shape (n, 3).
    depth_mm
        How deep each point lies below the object's surface (negative outside), mm, shape (n,); NaN where the object
        has no single surface.
    """

    points: Array
    depth_mm: Array


def common_cylinder(*, radius_mm: float, half_length_mm: float, margin_mm: float, ends: bool) -> CommonObject:
    """The points of a cylinder along z about the origin, and of its surroundings up to the margin.

    Parameters
    ----------
    radius_mm, half_length_mm
        Size of the object, mm; without ends, how far from its middle it is compared.
    margin_mm
        How far beyond the surface points are taken, mm.
    ends
        Whether the ends belong to what is compared.

    >>> found = common_cylinder(radius_mm=50.0, half_length_mm=40.0, margin_mm=8.0, ends=True)
    >>> len(found.points) <= MOST_POINTS, float(found.depth_mm.max()) <= 40.0
    (True, True)
    """
    reach, along = radius_mm + margin_mm, half_length_mm + (margin_mm if ends else 0.0)
    step = max((8.0 * reach * reach * along / MOST_POINTS) ** (1.0 / 3.0), 1.0)
    across = np.arange(-np.floor(reach / step), np.floor(reach / step) + 1) * step
    z = np.arange(-np.floor(along / step), np.floor(along / step) + 1) * step
    grid = np.stack(np.meshgrid(across, across, z, indexing="ij"), axis=-1).reshape(-1, 3)
    radius = np.hypot(grid[:, 0], grid[:, 1])
    kept = radius <= reach
    depth = radius_mm - radius[kept]
    if ends:
        depth = np.minimum(depth, half_length_mm - np.abs(grid[kept, 2]))
    return CommonObject(grid[kept], depth)


def place_cylinder(
    scanned: PhantomVolume, fit: Mapping[str, Any], common: CommonObject, *, size: tuple[float, float | None]
) -> Array:
    """Places (voxel indices, shape (3, n)) of a common cylinder's points in one image.

    A cylinder of another size is laid on the common one by the distance from its wall and its ends, the middle being
    stretched: at a wall far wider than the blur the image depends on that distance alone.

    Parameters
    ----------
    scanned
        The image that the fit was made from.
    fit
        The fit's record: centre, tilt, radius, levels inside and outside, length.
    common
        The points.
    size
        Radius of the common object and half its length, mm; None for a length that is not compared.

    Raises
    ------
    NotComparableError
        If the ends are to be compared and are not seen in this image.
    """
    radius_mm, half_length_mm = size
    frame = _cylinder_frame(fit)
    middle = np.array(fit["centre_mm"], dtype=float)
    low = high = None
    if half_length_mm is not None:
        low, high = _ends(scanned, fit, frame, middle)
    points = common.points
    radius = np.hypot(points[:, 0], points[:, 1])
    scale = _stretch(radius, own=float(fit["radius_mm"]), common=radius_mm) / np.maximum(radius, 1e-9)
    along = points[:, 2].copy()
    if low is not None and high is not None and half_length_mm is not None:
        half = (high - low) / 2.0
        along = np.sign(along) * _stretch(np.abs(along), own=half, common=half_length_mm) + (high + low) / 2.0
    placed = np.stack([points[:, 0] * scale, points[:, 1] * scale, along], axis=-1) @ frame + middle
    return np.asarray(placed.T / np.array(scanned.voxel_mm)[:, None])


def _stretch(distance: Array, *, own: float, common: float) -> Array:
    """The outer half of an object keeps its distance from the surface, the inner half is stretched."""
    inner = common / 2.0
    return np.where(distance > inner, own + distance - common, distance * (own - inner) / inner)


def _cylinder_frame(fit: Mapping[str, Any]) -> Array:
    """Unit vectors of the cylinder's frame as rows: two across, one along it."""
    tilt, lean = np.radians(float(fit["tilt_deg"])), np.radians(float(fit["tilt_direction_deg"]))
    axis = np.array([np.sin(tilt) * np.cos(lean), np.sin(tilt) * np.sin(lean), np.cos(tilt)])
    first = np.array([1.0, 0.0, 0.0]) - axis[0] * axis
    first /= np.linalg.norm(first)
    return np.stack([first, np.cross(axis, first), axis])


def _ends(scanned: PhantomVolume, fit: Mapping[str, Any], frame: Array, middle: Array) -> tuple[float, float]:
    """Where the ends lie along the axis, mm from the fit's middle: the half height of the mean over the core."""
    length = fit.get("length_mm")
    if not length or fit.get("ends_seen") != 2:
        raise NotComparableError("its ends do not both lie inside the field")
    rings = np.linspace(0.0, 0.6 * float(fit["radius_mm"]), 7)[1:]
    angles = np.arange(24) * np.pi / 12.0
    core = np.array([(r * np.cos(a), r * np.sin(a)) for r in rings for a in angles])
    found = []
    for sign in (-1.0, 1.0):
        along = sign * float(length) / 2.0 + np.arange(-12.0, 12.01, 0.25)
        points = np.concatenate([np.repeat(core, along.size, axis=0), np.tile(along, len(core))[:, None]], axis=1)
        places = ((points @ frame + middle) / np.array(scanned.voxel_mm)).T
        profile = sample(scanned.volume, places).reshape(len(core), -1).mean(axis=0)
        level = (float(fit["inside"]) + float(fit["outside"])) / 2.0
        above = (profile - level) * -sign  # rises where the object begins
        crossing = np.flatnonzero((above[:-1] < 0) & (above[1:] >= 0))
        if crossing.size != 1:
            raise NotComparableError("its ends are not where the fit's length says")
        k = int(crossing[0])
        found.append(float(along[k] + (along[k + 1] - along[k]) * -above[k] / (above[k + 1] - above[k])))
    return found[0], found[1]


def sample(volume: Array, places: Array) -> Array:
    """Values of a volume at places between its voxels (indices, shape (3, n)), by cubic splines; NaN outside."""
    inside = np.all((places >= 0) & (places <= (np.array(volume.shape) - 1.0)[:, None]), axis=0)
    values = np.full(places.shape[1], np.nan)
    values[inside] = ndimage.map_coordinates(volume, places[:, inside], order=3, mode="mirror")
    return values


def common_spheres(diameters_mm: Sequence[float], *, margin_mm: float) -> tuple[CommonObject, NDArray[np.intp]]:
    """The points of spheres and their surroundings, each in a box of its own about the sphere's middle.

    Parameters
    ----------
    diameters_mm
        Inner diameters, mm.
    margin_mm
        How far beyond the surface points are taken, mm.

    Returns
    -------
    CommonObject, numpy.ndarray
        The points, and which sphere each belongs to, shape (n,).

    >>> found, owner = common_spheres([20.0, 10.0], margin_mm=4.0)
    >>> float(found.depth_mm[owner == 1].max())
    5.0
    """
    reaches = [diameter / 2.0 + margin_mm for diameter in diameters_mm]
    step = max((sum(4.2 * reach**3 for reach in reaches) / MOST_POINTS) ** (1.0 / 3.0), 1.0)
    points, depth, owner = [], [], []
    for index, (diameter, reach) in enumerate(zip(diameters_mm, reaches, strict=True)):
        line = np.arange(-np.floor(reach / step), np.floor(reach / step) + 1) * step
        grid = np.stack(np.meshgrid(line, line, line, indexing="ij"), axis=-1).reshape(-1, 3)
        distance = np.linalg.norm(grid, axis=1)
        kept = distance <= reach
        points.append(grid[kept])
        depth.append(diameter / 2.0 - distance[kept])
        owner.append(np.full(int(kept.sum()), index, dtype=np.intp))
    return CommonObject(np.concatenate(points), np.concatenate(depth)), np.concatenate(owner)


def place_spheres(
    scanned: PhantomVolume,
    fit: Mapping[str, Any],
    common: CommonObject,
    *,
    owner: NDArray[np.intp],
    diameters_mm: Sequence[float],
) -> Array:
    """Places (voxel indices, shape (3, n)) of the spheres' points in one image.

    Raises
    ------
    NotComparableError
        If one of the spheres was not found in this image.
    """
    centres = {round(float(sphere["diameter_mm"]), 3): sphere["centre_mm"] for sphere in fit["spheres"]}
    wanted = [round(float(diameter), 3) for diameter in diameters_mm]
    missing = [f"{diameter:g}" for diameter in wanted if diameter not in centres]
    if missing:
        raise NotComparableError(f"its sphere of {missing[0]} mm was not found")
    placed = common.points + np.array([centres[diameter] for diameter in wanted])[owner]
    return np.asarray(placed.T / np.array(scanned.voxel_mm)[:, None])


def common_reference(model: ReferenceModel) -> CommonObject:
    """The voxel centres of a reference object that hold activity, thinned evenly to the number that is compared.

    >>> model = ReferenceModel(np.ones((20, 20, 20)), voxel_mm=(2.0, 2.0, 2.0))
    >>> common_reference(model).points.shape
    (8000, 3)
    """
    stride = 1
    while np.count_nonzero(model.values[::stride, ::stride, ::stride]) > MOST_POINTS:
        stride += 1
    index = np.argwhere(model.values[::stride, ::stride, ::stride] > 0) * stride
    points = model.low_mm + (index + 0.5) * model.voxel_mm
    return CommonObject(points, np.full(len(points), np.nan))


def place_reference(
    scanned: PhantomVolume, fit: Mapping[str, Any], common: CommonObject, *, model: ReferenceModel
) -> Array:
    """Places (voxel indices, shape (3, n)) of a reference object's points in one image, by the fitted motion."""
    flip = tuple(-1 if name in str(fit["flip"]) else 1 for name in AXIS_NAMES)
    turn = Rotation.from_rotvec(np.array(fit["motion"]["rotation_deg"], dtype=float), degrees=True).as_matrix()
    shift = np.array(fit["motion"]["translation_mm"], dtype=float)
    motion = Motion(shift, turn, (flip[0], flip[1], flip[2]), model.centre_mm)
    middle = (np.array(scanned.volume.shape) - 1.0) / 2.0
    return np.asarray((motion.apply(common.points) / np.array(scanned.voxel_mm) + middle).T)
