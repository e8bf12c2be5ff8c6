"""An invented head: where each tissue lies, as a drawing in formulas, a little different in every subject.

Positions are in millimetres: x to the right, y to the front, z upwards, with the origin in the middle of the brain.
Shapes are given as signed depths (positive inside, about 1 mm per mm), so that each edge falls partly into a cell.
The cortex is a ribbon under the brain's surface that follows the furrows inwards; furrows lie where the phase of a sum
of random waves, which live on the brain's surface, passes through a multiple of pi.
"""

from dataclasses import dataclass

import numpy as np

RIBBON_MM = 3.5
"""Thickness of the cortical grey matter."""
FURROW_MM = 0.7
"""Half the fluid-filled gap of a furrow."""
FURROW_SPACING_MM = 17.5
"""Mean distance between neighbouring furrows."""

TISSUES = ("grey", "white", "fluid", "deep", "cerebellum", "stem", "skull", "soft", "focus")
"""Names of the tissues, in the order of `Head.tissues`."""


@dataclass(frozen=True)
class Head:
    """One subject's anatomy.

    Attributes
    ----------
    size
        Scale of the head along x, y, z, near 1.
    ventricle
        Scale of the ventricles' calibre.
    furrow_depth_mm
        How far furrows reach inwards.
    waves, phases
        Wave vectors (1/mm), shape (n, 3), and phases of the furrows' pattern, shape (n,).
    foci_mm
        Centres (x, y, z) and radii of small hot structures, shape (n, 4).
    """

    size: np.ndarray
    ventricle: float
    furrow_depth_mm: float
    waves: np.ndarray
    phases: np.ndarray
    foci_mm: np.ndarray


@dataclass(frozen=True)
class Pose:
    """How a head lies in the scanner: turns about x, y, z (degrees) and the brain's centre (x, y, z; mm)."""

    turns_deg: tuple[float, float, float] = (0.0, 0.0, 0.0)
    centre_mm: tuple[float, float, float] = (0.0, 0.0, 0.0)


def draw_head(generator: np.random.Generator) -> Head:
    """A random subject's anatomy.

    >>> draw_head(np.random.default_rng(1)).waves.shape
    (24, 3)
    """
    direction = generator.standard_normal((24, 3))
    direction /= np.linalg.norm(direction, axis=1, keepdims=True)
    number = np.pi / FURROW_SPACING_MM * generator.uniform(0.85, 1.2, (24, 1))
    foci = [
        [generator.uniform(-3, 3), generator.uniform(14, 20), -36.0, 3.5],  # near the gland below the brain
        [
            generator.choice([-1.0, 1.0]) * generator.uniform(28, 45),
            generator.uniform(-45, 40),
            generator.uniform(0, 38),
            generator.uniform(2.8, 4.2),
        ],
    ]
    return Head(
        size=generator.uniform(0.95, 1.05, 3),
        ventricle=float(generator.uniform(0.85, 1.45)),
        furrow_depth_mm=float(generator.uniform(17.0, 22.0)),
        waves=direction * number,
        phases=generator.uniform(0, 2 * np.pi, 24),
        foci_mm=np.array(foci),
    )


def tissue_shares(
    head: Head, *, pose: Pose, axes_mm: tuple[np.ndarray, np.ndarray, np.ndarray]
) -> dict[str, np.ndarray]:
    """Share of each tissue in each cell of a grid.

    Parameters
    ----------
    head
        The anatomy.
    pose
        How it lies in the scanner.
    axes_mm
        Centres of the cells along the scanner's x, y, z, mm, equally spaced.

    Returns
    -------
    dict of str to numpy.ndarray
        For each name in `TISSUES` the share, float32, shape (nx, ny, nz). The shares of a cell add up to at most 1;
        what is missing is air.

    >>> axis = np.arange(-4.0, 5.0, 2.0)
    >>> shares = tissue_shares(draw_head(np.random.default_rng(1)), pose=Pose(), axes_mm=(axis, axis, axis))
    >>> bool(sum(shares.values()).max() <= 1.0001)
    True
    """
    cell = float(axes_mm[0][1] - axes_mm[0][0])
    points = _head_positions(head, pose, axes_mm)
    brain, upper, hind, stem = _brain_depths(points)
    within = 3.0 + _union(_union(brain, hind, 10.0), stem, 6.0)
    layers, left = _outer_layers(points, within, cell)
    shares = {name: np.zeros(left.shape, np.float32) for name in TISSUES}
    shares.update(layers)

    # Only cells in or next to the brain need the rest of the drawing.
    where = np.maximum(np.maximum(brain, hind), stem) > -2 * cell
    local = points[:, where]
    parts = _brain_parts(head, local, brain[where], upper[where], cell)
    inside = _share(np.maximum(brain, np.maximum(hind, stem))[where], cell) * left[where]
    cerebrum = _share(brain[where], cell)
    behind = (1 - cerebrum) * _share(hind[where], cell)
    folia = _folia(local, hind[where], cell)
    grey, deep, fluid, focus = parts["grey"], parts["deep"], parts["fluid"], parts["focus"]
    mixture = {
        "grey": cerebrum * grey,
        "deep": cerebrum * deep,
        "white": cerebrum * (1 - grey - deep - fluid) + behind * (1 - folia),
        "cerebellum": behind * folia,
        "stem": (1 - cerebrum) * (1 - behind / np.maximum(1 - cerebrum, 1e-6)) * _share(stem[where], cell),
    }
    for name, share in mixture.items():
        shares[name][where] = np.clip(share * (1 - focus), 0, 1) * left[where]
    shares["focus"][where] = focus * inside
    shares["fluid"] = np.clip(left - sum(shares[name] for name in (*mixture, "focus")), 0, 1)
    return shares


def _head_positions(head: Head, pose: Pose, axes_mm: tuple[np.ndarray, np.ndarray, np.ndarray]) -> np.ndarray:
    """Positions in the head's own frame, shape (3, nx, ny, nz)."""
    about_x, about_y, about_z = np.radians(pose.turns_deg)
    turn = np.eye(3)
    for axis, angle in ((0, about_x), (1, about_y), (2, about_z)):
        first, second = (axis + 1) % 3, (axis + 2) % 3
        step = np.eye(3)
        step[first, first] = step[second, second] = np.cos(angle)
        step[first, second], step[second, first] = -np.sin(angle), np.sin(angle)
        turn = step @ turn
    back = (turn.T / head.size[:, None]).astype(np.float32)
    x, y, z = (
        (axis - centre).astype(np.float32).reshape(shape)
        for axis, centre, shape in zip(axes_mm, pose.centre_mm, ((-1, 1, 1), (1, -1, 1), (1, 1, -1)), strict=True)
    )
    return np.stack([row[0] * x + row[1] * y + row[2] * z for row in back])


def _ellipsoid(p: np.ndarray, centre: tuple[float, float, float], axes: tuple[float, float, float]) -> np.ndarray:
    """Depth (mm) inside an ellipsoid, to first order near its surface."""
    x, y, z = ((p[i] - centre[i]) / axes[i] for i in range(3))
    radius = np.sqrt(x * x + y * y + z * z) + 1e-6
    slope = np.sqrt((x / axes[0]) ** 2 + (y / axes[1]) ** 2 + (z / axes[2]) ** 2) + 1e-6
    return radius * (1 - radius) / slope


def _tube(p: np.ndarray, path: list[tuple[float, float, float]], radius: float) -> np.ndarray:
    """Depth (mm) inside a tube around a chain of points."""
    nearest = np.full(p.shape[1:], np.inf, np.float32)
    for start, end in zip(np.array(path[:-1], np.float32), np.array(path[1:], np.float32), strict=True):
        line = end - start
        offset = [p[i] - start[i] for i in range(3)]
        along = np.clip(sum(o * s for o, s in zip(offset, line, strict=True)) / float(line @ line), 0, 1)
        squared = sum((o - along * s) ** 2 for o, s in zip(offset, line, strict=True))
        nearest = np.minimum(nearest, squared)
    return radius - np.sqrt(nearest)


def _union(a: np.ndarray, b: np.ndarray, blend: float) -> np.ndarray:
    """Depth in either of two shapes with the seam rounded over `blend` mm."""
    mix = np.clip(0.5 + 0.5 * (a - b) / blend, 0, 1)
    return b + (a - b) * mix + blend * mix * (1 - mix)


def _share(depth: np.ndarray, cell: float) -> np.ndarray:
    """Share of a cell that lies inside a shape with this depth at the cell's centre."""
    return np.clip(depth / cell + 0.5, 0, 1)


def _outer_layers(p: np.ndarray, within: np.ndarray, cell: float) -> tuple[dict[str, np.ndarray], np.ndarray]:
    """Shares of skull and of scalp, face and neck, and what is left within the skull.

    `within` is the depth below the skull's inner surface.
    """
    vault = _ellipsoid(p, (0, -1, 1), (80, 99, 79))
    face = _ellipsoid(p, (0, 44, -66), (54, 48, 54))
    neck = _tube(p, [(0, -22, -60), (0, -30, -190)], 54.0)
    outline = _union(_union(vault, face, 14.0), neck, 14.0)
    left = _share(within, cell)
    bone = _share(np.minimum(within + 6.0, outline - 5.0), cell) * (1 - left)
    soft = np.clip(_share(outline, cell) - left - bone, 0, 1)
    # The nose, the mouth and the throat hold air.
    soft *= 1 - _share(_tube(p, [(0, 82, -48), (0, 58, -46), (0, 40, -52)], 9.0), cell)
    soft *= 1 - _share(_tube(p, [(0, 34, -60), (0, 14, -84), (0, 8, -190)], 7.0), cell)
    return {"skull": bone.astype(np.float32), "soft": soft.astype(np.float32)}, left.astype(np.float32)


def _brain_depths(p: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Depths of cerebrum, of its upper part alone, of the cerebellum, and of the brain stem."""
    mirrored = np.stack([np.abs(p[0]), p[1], p[2]])
    upper = _ellipsoid(p, (0, -2, 2), (66, 84, 64))
    # The underside rises to the front; the cerebellum takes the room behind.
    floor = -_union(-(p[2] + 24 - 0.06 * p[1]), -upper, 10.0)
    temporal = _ellipsoid(mirrored, (43, 2, -27), (21, 40, 19))
    cerebrum = _union(floor, temporal, 5.0)
    hind = _ellipsoid(mirrored, (20, -52, -42), (31, 30, 21))
    stem = _tube(p, [(0, -18, -8), (0, -20, -34), (0, -26, -62), (0, -30, -120)], 11.5)
    return cerebrum, upper, hind, stem


def _furrow_distance(head: Head, p: np.ndarray, brain: np.ndarray) -> np.ndarray:
    """Distance (mm) to the nearest furrow's middle sheet or to the surface."""
    # On the way inwards the pattern keeps to the surface point above, so that furrows stand upright on the surface.
    level = np.sqrt((p[0] / 66) ** 2 + ((p[1] + 2) / 84) ** 2 + ((p[2] - 2) / 64) ** 2)
    stretch = 0.94 / np.clip(level, 0.6, None) + 0.06
    # The two halves are alike but not the same: the mirrored pattern drifts apart slowly.
    place = np.stack([np.abs(p[0]) * stretch + 0.055 * p[0], p[1] * stretch + 0.05 * p[0], p[2] * stretch])
    real, imaginary, turn = _wave_sum(head, place)
    # |sin| of the phase is zero in the middle of a furrow; over the phase's slope it becomes a distance.
    size = real**2 + imaginary**2 + 1e-4
    sine = np.abs(imaginary) / np.sqrt(size)
    slope = np.clip(np.sqrt(np.sum(turn**2, axis=0)) / size, 0.4 * np.pi / FURROW_SPACING_MM, None)
    sheet = np.arcsin(np.clip(sine, 0, 1)) / (slope * stretch)
    # Furrows reach so deep and no deeper, and none runs into the middle of the underside.
    centre = _ellipsoid(p, (0, -8, -10), (24, 34, 20))
    below = np.clip(np.maximum(brain - head.furrow_depth_mm, centre), 0, None)
    furrow = np.sqrt(sheet**2 + below**2)

    # The cleft between the halves ends above the bridge that joins them; the side cleft runs to the island.
    bridge = np.clip(_ellipsoid(p, (0, -4, 2), (40, 46, 27)), 0, None)
    middle = np.sqrt((p[0] - 0.02 * p[1]) ** 2 + bridge**2)
    side_sheet = p[2] + 9 - 0.22 * (p[1] + 4)
    side = np.sqrt(
        side_sheet**2 + np.clip(37 - np.abs(p[0]), 0, None) ** 2 + np.clip(np.abs(p[1] - 2) - 32, 0, None) ** 2
    )
    island = np.sqrt(
        (np.abs(p[0]) - 38) ** 2
        + np.clip(np.abs(p[1] - 6) - 18, 0, None) ** 2
        + np.clip(np.abs(p[2] + 5) - 11, 0, None) ** 2
    )
    return np.minimum.reduce([brain, furrow, middle, side, island])


def _wave_sum(head: Head, place: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Sum of the head's waves: real part, imaginary part, and the phase's gradient times the squared size."""
    real = np.zeros(place.shape[1:], np.float32)
    imaginary = np.zeros_like(real)
    real_slope, imaginary_slope = np.zeros_like(place), np.zeros_like(place)
    for wave, phase in zip(head.waves.astype(np.float32), head.phases.astype(np.float32), strict=True):
        angle = wave[0] * place[0] + wave[1] * place[1] + wave[2] * place[2] + phase
        cosine, sine = np.cos(angle), np.sin(angle)
        real += cosine
        imaginary += sine
        for axis in range(3):
            real_slope[axis] -= wave[axis] * sine
            imaginary_slope[axis] += wave[axis] * cosine
    return real, imaginary, real * imaginary_slope - imaginary * real_slope


def _brain_parts(head: Head, p: np.ndarray, brain: np.ndarray, upper: np.ndarray, cell: float) -> dict[str, np.ndarray]:
    """Shares of grey matter, deep grey matter, fluid and hot structures inside the cerebrum."""
    distance = _furrow_distance(head, p, brain)
    grey = _share(FURROW_MM + RIBBON_MM - distance, cell)
    gap = np.clip((FURROW_MM - distance) / cell + 0.5, 0, 1) * np.clip(upper / 4, 0, 1)

    mirrored = np.stack([np.abs(p[0]), p[1], p[2]])
    calibre = 4.6 * head.ventricle
    front = _tube(mirrored, [(13, 33, 5), (9, 16, 12), (10, -8, 17), (15, -28, 13)], calibre)
    rear = _tube(mirrored, [(15, -28, 13), (23, -40, 5), (22, -62, 6)], 0.85 * calibre)
    third = _ellipsoid(p, (0, -6, 0), (2.0 * head.ventricle, 13, 10))
    ventricles = _share(np.maximum(np.maximum(front, rear), third), cell)

    nuclei = np.maximum.reduce(
        [
            _ellipsoid(mirrored, (15.5, 19, 6), (5.2, 11, 9)),  # caudate, head
            _tube(mirrored, [(15.5, 17, 11), (18, -2, 20), (21, -20, 18)], 3.2),  # caudate, body
            _ellipsoid(mirrored, (27, 4, 0), (5.6, 16, 9.5)),  # putamen
            _ellipsoid(mirrored, (11, -15, 5), (8, 13, 8.5)),  # thalamus
        ]
    )
    deep = _share(nuclei, cell) * (1 - ventricles)
    # Around the nuclei and the ventricles there is white matter, not cortex.
    core = np.clip(np.maximum(nuclei, np.maximum(front, rear)) / 3 + 2.0, 0, 1)
    island_free = np.clip((36 - np.abs(p[0])) / 3, 0, 1)
    grey = np.clip(grey - gap, 0, 1) * (1 - core * island_free)
    fluid = np.maximum(ventricles, gap * (1 - core * island_free))
    grey = np.clip(np.minimum(grey, 1 - fluid - deep), 0, 1)

    focus = np.zeros_like(brain)
    for x, y, z, radius in head.foci_mm:
        depth = radius - np.sqrt((p[0] - x) ** 2 + (p[1] - y) ** 2 + (p[2] - z) ** 2)
        focus = np.maximum(focus, _share(depth, cell))
    return {"grey": grey, "deep": deep, "fluid": fluid, "focus": focus}


def _folia(p: np.ndarray, hind: np.ndarray, cell: float) -> np.ndarray:
    """Share of grey matter in the cerebellum: fine leaves around a white core."""
    leaves = 0.82 + 0.18 * np.cos(2 * np.pi * (p[2] + 0.35 * p[1]) / 9.0)
    core = _ellipsoid(np.stack([np.abs(p[0]), p[1], p[2]]), (14, -44, -38), (14, 11, 7))
    return leaves * (1 - _share(core, cell)) * np.clip(hind / 2 + 0.5, 0.3, 1)
