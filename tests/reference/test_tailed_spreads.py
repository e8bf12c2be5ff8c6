"""Real point spreads have tails: how far quadrature misses then, and that a matched kernel reaches the target."""

import numpy as np
import pytest
from scipy.optimize import brentq

from evenblur.achieving import LoadedPhantom, ProvingPhantom
from evenblur.matching import match_kernel
from evenblur.measuring import PhantomVolume
from evenblur.phantoms.point_source import measure
from evenblur.widths import missing_width

SOURCE = "Sci Rep 2019, s41598-019-51898-z, table 6: tenth over half maximum of three scanners, 1.99 to 2.31"
TARGET = 8.0
VOXEL = (2.0, 2.0, 2.0)
# Two Gaussians: a sharp one, and one of an eighth of its height and 2.35 times its width.
SHARP, WIDE, HEIGHT = 0.85, 2.0, 1.0 / 8.0


def spread(squared_mm, width_mm):
    """The tailed spread at squared distances from its middle, peak 1."""
    gauss = [np.exp(-4.0 * np.log(2.0) * squared_mm / (share * width_mm) ** 2) for share in (SHARP, WIDE)]
    return (gauss[0] + HEIGHT * gauss[1]) / (1.0 + HEIGHT)


def full_width(width_mm, level):
    return 2.0 * brentq(lambda x: spread(x * x, width_mm) - level, 0.0, 10.0 * width_mm)


@pytest.fixture(scope="module")
def phantom():
    """Four sources blurred by the tailed spread, as a site would send them."""
    shape = (64, 64, 48)
    places = np.meshgrid(*(np.arange(n) * d for n, d in zip(shape, VOXEL, strict=True)), indexing="ij", sparse=True)
    volume = np.zeros(shape)
    for centre in ((34.3, 35.1, 34.0), (92.2, 34.4, 33.1), (35.0, 93.3, 62.2), (92.7, 91.6, 61.0)):
        volume += spread(sum((x - c) ** 2 for x, c in zip(places, centre, strict=True)), 5.0)
    return PhantomVolume(volume, VOXEL)


def loaded(phantom):
    row = ProvingPhantom("points", "points.nii", "point_source", {}, ("in_plane", "axial"))
    return LoadedPhantom(row, phantom, {})


def test_the_spread_has_the_tails_of_published_ones(check):
    ratio = full_width(5.0, 0.1) / full_width(5.0, 0.5)
    check.inside(
        "tenth over half maximum of the built spread", source=SOURCE, low=1.99, high=2.31, found=ratio, digits=3
    )


def test_quadrature_misses_and_matching_reaches_the_target(check, phantom):
    found = measure(phantom.volume, voxel_mm=VOXEL, details={})
    assert {flag.code for flag in found.flags} & {"tail_heavy", "residuals_structured"}
    kernel = {
        "in_plane": missing_width(found.in_plane.fwhm_mm, TARGET),
        "axial": missing_width(found.axial.fwhm_mm, TARGET),
    }
    by_quadrature = loaded(phantom).measure_smoothed(kernel["in_plane"], kernel["axial"]).in_plane.fwhm_mm
    miss = by_quadrature - TARGET
    check.shown(
        "in-plane width of the tailed spread after its kernel by quadrature, target 8 mm",
        source="quadrature, exact for Gaussians only",
        expected="8 mm",
        found=f"{by_quadrature:.2f} mm",
    )
    # More than the default tolerance of 0.3 mm: a study would see the verdict `fail`.
    assert miss > 0.3
    record = match_kernel(
        [loaded(phantom)],
        setup="quay-1",
        phantom_session="p1",
        kernel=kernel,
        target={"in_plane": TARGET, "axial": TARGET},
    )
    assert record["settled"]
    achieved = loaded(phantom).measure_smoothed(record["kernel"]["in_plane_mm"], record["kernel"]["axial_mm"])
    for direction in ("in_plane", "axial"):
        words = direction.replace("_", "-")
        check.close(
            f"{words} width of the tailed spread after its matched kernel",
            source="the target",
            expected=TARGET,
            found=getattr(achieved, direction).fwhm_mm,
            within=0.01,
            digits=3,
            unit="mm",
        )
