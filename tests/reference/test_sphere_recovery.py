"""Recovery at the centre of spheres, discs and slabs that the engine smoothed from a sharper image.

Each object is made in closed form at a sharp width on fine voxels; the engine brings it to the total width.
"""

import numpy as np
import pytest
from scipy import special

from evenblur.smoothing import smooth_volume
from reference_checks import CLOSED_FORM
from reference_formulas import (
    FWHM_PER_SIGMA,
    disc_centre,
    missing,
    quadrature,
    slab_centre,
    sphere_centre,
    sphere_profile,
)
from simulation import disc
from sphere_simulation import STANDARD_DIAMETERS_MM, add_ball

SHARP_MM = 2.5
SOURCE = f"Kessler, Ellis, Eden 1984, J Comput Assist Tomogr 8:514 (citation from memory); {CLOSED_FORM}"
# The sharp image's waves beyond Nyquist, folded: under 1e-4 of the object. Single precision is far below.
WITHIN = 2e-4


def sharp_ball(diameter_mm, *, size=77, voxel_mm=1.0, centre=None, wall_mm=None, background=0.1):
    """A ball of activity 1 at the sharp width; with a wall, in a warm background that the wall keeps out."""
    image = np.zeros((size, size, size))
    place = ((size // 2 if centre is None else centre) * voxel_mm,) * 3
    common = {"voxel_mm": (voxel_mm,) * 3, "centre_mm": place, "sigma_mm": (SHARP_MM / FWHM_PER_SIGMA,) * 3}
    add_ball(image, radius_mm=diameter_mm / 2.0, value=1.0, **common)
    if wall_mm is not None:
        image += background
        add_ball(image, radius_mm=diameter_mm / 2.0 + wall_mm, value=-background, **common)
    return image


def smoothed(image, total_mm, *, voxel_mm=1.0, axes=3):
    added = missing(SHARP_MM, total_mm)
    widths = tuple(added if k < axes else 0.0 for k in range(3))
    return smooth_volume(image, voxel_mm=(voxel_mm,) * 3, fwhm_mm=widths).astype(float)


@pytest.mark.parametrize("diameter_mm", STANDARD_DIAMETERS_MM)
def test_standard_spheres(check, diameter_mm):
    image = sharp_ball(diameter_mm)
    totals = [4.0, 5.0, 7.0, 8.0, 10.0]
    found = [smoothed(image, total)[38, 38, 38] for total in totals]
    check.close(
        f"centre of a {diameter_mm:g} mm sphere at 4, 5, 7, 8, 10 mm",
        source=SOURCE,
        expected=sphere_centre(diameter_mm, totals),
        found=found,
        within=WITHIN,
    )


def test_spheres_with_a_cold_wall_in_a_warm_background(check):
    # Background-corrected recovery, activity 1, background 0.1, wall 1 mm: 10, 13, 17, 22 mm at 5, then at 7 mm.
    tabulated = [0.8541, 0.9732, 0.9988, 1.0000, 0.5629, 0.8011, 0.9546, 0.9964]
    found, closed = [], []
    for total in (5.0, 7.0):
        for size in (10.0, 13.0, 17.0, 22.0):
            centre = smoothed(sharp_ball(size, size=61, wall_mm=1.0), total)[30, 30, 30]
            found.append((centre - 0.1) / 0.9)
            hot, walled = sphere_centre(size, total), sphere_centre(size + 2.0, total)
            closed.append(float((hot + 0.1 * (1.0 - walled) - 0.1) / 0.9))
    assert tabulated == pytest.approx(closed, abs=6e-5)
    check.close(
        "centre of 10, 13, 17, 22 mm spheres with 1 mm wall, background a tenth, at 5, then 7 mm",
        source=f"{SOURCE}: hot sphere and cold shell added",
        expected=tabulated,
        found=found,
        within=3e-4,
    )


def test_threshold_that_gives_the_true_volume(check):
    source = "Hofheinz et al. 2010, Phys Med Biol (authors from memory), PMID 20107246, abstract"
    levels = [0.0, 0.25, 0.5]
    found = {}
    for wall in (0.0, 1.0):
        images = [smoothed(sharp_ball(22.0, wall_mm=wall, background=level), 7.0) for level in levels]
        found[wall] = [
            (image[38 + 11, 38, 38] - level) / (image[38, 38, 38] - level)
            for image, level in zip(images, levels, strict=True)
        ]
    at_edge = float(sphere_profile(11.0, radius=11.0, sigma=7.0 / FWHM_PER_SIGMA) / sphere_centre(22.0, 7.0))
    check.close(
        "threshold that reproduces a 22 mm sphere without a wall at 7 mm, background 0, 0.25, 0.5",
        source=f"{source}: independent of the background; {CLOSED_FORM}",
        expected=[at_edge] * 3,
        found=found[0.0],
        within=5e-4,
    )
    falls = bool(np.all(np.diff(found[1.0]) < -0.03))
    check.holds(
        "threshold that reproduces a sphere with 1 mm wall falls with the background",
        source=f"{source}: falls with the background, about 43 to 25 % from 0 to 0.5",
        expected="falls",
        found="falls" if falls else "does not fall",
        true=falls,
    )
    check.shown(
        "threshold of a 22 mm sphere with 1 mm wall at 7 mm, background 0, 0.5",
        source=f"{source}; its sphere, wall and width are not given there",
        expected="about 43, 25 %",
        found=f"{100 * found[1.0][0]:.1f}, {100 * found[1.0][2]:.1f} %",
    )


def test_disc(check):
    size, ratios = 16.0, np.array([1.0, 1.25, 1.5, 2.0, 2.5])
    covariance = (SHARP_MM / FWHM_PER_SIGMA) ** 2 * np.eye(2)
    flat = disc((91, 91), voxel_mm=(1.0, 1.0), centre_mm=(45.0, 45.0), radius_mm=size / 2, covariance_mm2=covariance)
    image = np.repeat(flat[..., None], 3, axis=2)
    found = [smoothed(image, size / ratio, axes=2)[45, 45, 1] for ratio in ratios]
    expected = [0.5, 0.661436, 0.789776, 0.9375, 0.986861]
    assert expected == pytest.approx(list(disc_centre(ratios, 1.0)), abs=1e-6)
    check.close(
        "centre of a disc (long cylinder) of 1, 1.25, 1.5, 2, 2.5 widths",
        source=f"{SOURCE}: 1 - 2^-(D/F)^2",
        expected=expected,
        found=found,
        within=WITHIN,
    )


def test_slab(check):
    size, ratios = 16.0, np.array([0.5, 1.0, 1.5, 2.0, 2.5])
    x = np.arange(161.0) - 80.0
    s = np.sqrt(2.0) * SHARP_MM / FWHM_PER_SIGMA
    line = 0.5 * (special.erf((x + size / 2) / s) - special.erf((x - size / 2) / s))
    image = np.broadcast_to(line[:, None, None], (161, 2, 2)).copy()
    found = [smoothed(image, size / ratio, axes=1)[80, 0, 0] for ratio in ratios]
    expected = [0.443941, 0.760968, 0.922623, 0.981468, 0.996755]
    assert expected == pytest.approx(list(slab_centre(ratios, 1.0)), abs=1e-6)
    check.close(
        "centre of a slab of 0.5, 1, 1.5, 2, 2.5 widths",
        source=f"{SOURCE}: erf",
        expected=expected,
        found=found,
        within=WITHIN,
    )


def test_published_sayings_about_recovery(check):
    found = smoothed(sharp_ball(17.5, size=61), 7.0)[30, 30, 30]
    check.inside(
        "a sphere of 2.5 widths reads true at its centre",
        source="Kojima et al. 1989, J Nucl Med (authors and year from memory), abstract: true from 2.5 widths",
        low=0.95,  # a reader's "true"
        high=1.0,
        found=found,
        steady=1e-3,
    )
    covariance = (SHARP_MM / FWHM_PER_SIGMA) ** 2 * np.eye(2)
    flat = disc((61, 61), voxel_mm=(1.0, 1.0), centre_mm=(30.0, 30.0), radius_mm=5.0, covariance_mm2=covariance)
    centre = smoothed(np.repeat(flat[..., None], 3, axis=2), 6.0, axes=2)[30, 30, 1]
    check.shown(
        "maximum of a 10 mm disc of activity 100",
        source="Soret, Bacharach, Buvat 2007, J Nucl Med 48:932, caption of figure 1; the blur's width is not given",
        expected="85",
        found=f"{100 * centre:.1f} at 6 mm",
    )


@pytest.mark.parametrize(
    ("diameter_mm", "fwhm_mm", "voxel_mm", "fine_mm"), [(10.0, 7.0, 2.0, 1.0), (10.0, 5.0, 1.0, 0.5)]
)
def test_averaging_over_voxels_is_part_of_the_width(check, diameter_mm, fwhm_mm, voxel_mm, fine_mm):
    # The ball sits at the corner of eight fine voxels, which make one of the coarse voxels.
    size = 60
    image = sharp_ball(diameter_mm, size=size, voxel_mm=fine_mm, centre=size / 2 - 0.5)
    fine = smoothed(image, fwhm_mm, voxel_mm=fine_mm)
    half = size // 2
    middle = fine[half - 1 : half + 1, half - 1 : half + 1, half - 1 : half + 1]
    # The eight samples' mean has a box's variance less that of their own spacing: (h^2 - f^2) / 12.
    box_mm2 = (voxel_mm**2 - fine_mm**2) / 12.0
    expected = sphere_centre(diameter_mm, quadrature(fwhm_mm, FWHM_PER_SIGMA * np.sqrt(box_mm2)))
    plain = float(sphere_centre(diameter_mm, fwhm_mm))
    check.close(
        f"centre voxel of {voxel_mm:g} mm, {diameter_mm:g} mm sphere at {fwhm_mm:g} mm, mean of 8 parts",
        source=f"{SOURCE} at the width with the voxel's variance in it",
        expected=float(expected),
        found=float(middle.mean()),
        within=1.5e-3,
    )
    assert abs(plain - middle.mean()) > 3e-3  # without the correction it would be missed
