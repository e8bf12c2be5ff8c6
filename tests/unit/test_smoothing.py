"""Smoothing of volumes: transfer function, invariants, edges, NaN, routes, processors."""

import itertools
import os
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.ndimage import gaussian_filter
from scipy.optimize import curve_fit
from scipy.special import erf

from evenblur.smoothing import plan_smoothing, smooth_volume
from evenblur.widths import FWHM_PER_SIGMA

ONE = (1.0, 1.0, 1.0)
SCRIPTS = Path(__file__).parents[2] / "scripts"


def noise(shape, seed=0):
    return np.random.default_rng(seed).standard_normal(shape).astype(np.float32)


def wave(length: int, number: int) -> np.ndarray:
    return np.cos(np.pi * number * (np.arange(length) + 0.5) / length)


def slow_smooth(volume: np.ndarray, sigma_voxels) -> np.ndarray:
    """Double precision, from the definition: into cosine waves, times the factors, back."""
    result = np.asarray(volume, dtype=np.float64)
    for axis, sigma in enumerate(sigma_voxels):
        length = result.shape[axis]
        waves = np.stack([wave(length, number) for number in range(length)])
        waves /= np.sqrt((waves**2).sum(axis=1, keepdims=True))
        factors = np.exp(-0.5 * (sigma * np.pi * np.arange(length) / length) ** 2)
        result = np.moveaxis(np.tensordot(waves.T * factors @ waves, result, (1, axis)), 0, axis)
    return result


@pytest.mark.parametrize("axis", [0, 1, 2])
@pytest.mark.parametrize("width", [0.3, 0.5, 1.0, 2.0, 3.0, 5.0, 10.0, 20.0])
@pytest.mark.parametrize("route", ["image", "fourier", "auto"])
def test_every_wave_is_multiplied_by_its_factor_along_any_axis(axis, width, route):
    # All waves of the axis at once, side by side; 1e-5 is what the kernel promises, up to the Nyquist frequency.
    length = 120
    waves = np.stack([wave(length, number) for number in range(length)]).astype(np.float32)
    shape = [1, 1, 1]
    shape[axis], shape[(axis + 1) % 3] = length, length
    # moveaxis puts the waves' own direction on `axis`, their number on the next one.
    volume = np.moveaxis(waves.T[:, :, None], (0, 1, 2), (axis, (axis + 1) % 3, (axis + 2) % 3))
    widths = [0.0, 0.0, 0.0]
    widths[axis] = width
    smoothed = smooth_volume(volume, voxel_mm=ONE, fwhm_mm=tuple(widths), route=route)
    smoothed = np.moveaxis(smoothed, (axis, (axis + 1) % 3, (axis + 2) % 3), (0, 1, 2))[:, :, 0].T
    factors = np.exp(-0.5 * (width / FWHM_PER_SIGMA * np.pi * np.arange(length) / length) ** 2)
    measured = (smoothed * waves).sum(axis=1) / (waves.astype(float) ** 2).sum(axis=1)
    np.testing.assert_allclose(measured, factors, atol=1e-5)
    np.testing.assert_allclose(smoothed, factors[:, None] * waves, atol=1.5e-5)  # nothing else has come in


@pytest.mark.parametrize("order", ["C", "F"])
@pytest.mark.parametrize("axes", list(itertools.permutations(range(3))))
def test_axis_and_memory_order_do_not_matter(axes, order):
    volume, sizes, widths = noise((40, 70, 101)), (1.0, 2.0, 3.3), (2.1, 9.0, 4.0)
    expected = slow_smooth(volume, [w / v / FWHM_PER_SIGMA for w, v in zip(widths, sizes, strict=True)])
    turned = np.asarray(volume.transpose(axes), order=order)
    smoothed = smooth_volume(turned, voxel_mm=tuple(sizes[a] for a in axes), fwhm_mm=tuple(widths[a] for a in axes))
    np.testing.assert_allclose(smoothed.transpose(np.argsort(axes)), expected, atol=1e-5 * np.abs(expected).max())
    assert smoothed.flags[f"{order}_CONTIGUOUS"]


@settings(derandomize=True, deadline=None, max_examples=60)
@given(
    shape=st.tuples(*[st.integers(1, 45)] * 3),
    sizes=st.tuples(*[st.floats(1.0, 5.0)] * 3),
    widths=st.tuples(*[st.one_of(st.just(0.0), st.floats(0.5, 25.0))] * 3),
    double=st.booleans(),
)
def test_any_shape_voxel_and_width_agrees_with_the_slow_definition(shape, sizes, widths, double):
    volume = noise(shape).astype(np.float64 if double else np.float32) + 3
    smoothed = smooth_volume(volume, voxel_mm=sizes, fwhm_mm=widths)
    expected = slow_smooth(volume, [w / v / FWHM_PER_SIGMA for w, v in zip(widths, sizes, strict=True)])
    assert smoothed.dtype == np.float32
    np.testing.assert_allclose(smoothed, expected, atol=1e-5 * np.abs(expected).max())


@pytest.mark.parametrize("width", [0.5, 2.0, 3.0, 4.0, 11.0])
def test_image_and_fourier_routes_agree(width):
    volume = noise((150, 130, 33))
    by_image = smooth_volume(volume, voxel_mm=ONE, fwhm_mm=(width,) * 3, route="image")
    by_fourier = smooth_volume(volume, voxel_mm=ONE, fwhm_mm=(width,) * 3, route="fourier")
    assert np.abs(by_image - by_fourier).max() <= 1e-5 * np.abs(by_fourier).max()


def test_route_is_the_cheaper_and_named():
    assert plan_smoothing((20, 300, 300), voxel_mm=ONE, fwhm_mm=(1.0, 4.0, 1.0)).route == ("dense", "band", "split")
    assert plan_smoothing((1, 20, 9000), voxel_mm=ONE, fwhm_mm=(4.0, 0.0, 1.0)).route == ("none", "none", "cosine")
    assert "cosine" not in plan_smoothing((64, 64, 3000), voxel_mm=ONE, fwhm_mm=(1.0,) * 3, route="image").route


@pytest.mark.parametrize("width", [0.5, 1.0, 2.0, 3.0, 6.0, 15.0])
def test_totals_and_constants_are_kept(width):
    volume = np.abs(noise((130, 61, 33))) + 1
    smoothed = smooth_volume(volume, voxel_mm=ONE, fwhm_mm=(width,) * 3)
    assert smoothed.sum(dtype=float) == pytest.approx(volume.sum(dtype=float), rel=1e-6)
    constant = smooth_volume(np.full((130, 61, 33), 7.3, np.float32), voxel_mm=ONE, fwhm_mm=(width,) * 3)
    np.testing.assert_allclose(constant, np.float32(7.3), rtol=1e-6)


def test_zero_width_is_the_identity_bit_for_bit():
    volume = noise((9, 8, 7))
    np.testing.assert_array_equal(smooth_volume(volume, voxel_mm=ONE, fwhm_mm=(0.0, 0.0, 0.0)), volume)


def test_zero_width_leaves_its_axis_alone():
    volume = noise((9, 1, 7))
    smoothed = smooth_volume(volume, voxel_mm=ONE, fwhm_mm=(0.0, 0.0, 5.0))
    for row in range(9):
        alone = smooth_volume(volume[row : row + 1], voxel_mm=ONE, fwhm_mm=(0.0, 0.0, 5.0))
        np.testing.assert_allclose(smoothed[row : row + 1], alone, atol=1e-6)


def test_widths_add_in_quadrature():
    volume = noise((64, 64, 40))
    twice = smooth_volume(smooth_volume(volume, voxel_mm=ONE, fwhm_mm=(4.0,) * 3), voxel_mm=ONE, fwhm_mm=(3.0,) * 3)
    once = smooth_volume(volume, voxel_mm=ONE, fwhm_mm=(5.0,) * 3)
    # Two kernels of three axes, each right to 1e-5, and images of at most half the noise.
    assert np.abs(twice - once).max() < 1e-5


@pytest.mark.parametrize("flip", [(0,), (1,), (2,), (0, 1, 2)])
def test_flips_commute_with_smoothing(flip):
    volume = noise((65, 50, 37))
    there = smooth_volume(np.flip(volume, flip), voxel_mm=ONE, fwhm_mm=(3.0, 1.0, 5.0))
    assert np.abs(np.flip(there, flip) - smooth_volume(volume, voxel_mm=ONE, fwhm_mm=(3.0, 1.0, 5.0))).max() < 2e-6


def test_input_is_not_changed():
    volume = noise((20, 21, 22))
    volume[3, 3, 3] = np.nan
    before = volume.copy()
    smooth_volume(volume, voxel_mm=ONE, fwhm_mm=(3.0,) * 3)
    np.testing.assert_array_equal(volume, before)


@pytest.mark.filterwarnings("ignore:Covariance of the parameters")  # a fit without any residual has none
@pytest.mark.parametrize("voxel", [2.0, 4.0])
@pytest.mark.parametrize("axis", [0, 1, 2])
def test_point_of_6_mm_brought_to_8_mm_measures_8_mm(voxel, axis):
    widths = [0.0, 0.0, 0.0]
    widths[axis] = np.sqrt(8.0**2 - 6.0**2)
    shape = [3, 3, 3]
    shape[axis] = 40
    place = (np.arange(40) - 19.3) * voxel
    start = np.exp(-0.5 * (place * FWHM_PER_SIGMA / 6.0) ** 2)
    line = [1, 1, 1]
    line[axis] = 40
    volume = np.broadcast_to(start.reshape(line), shape)
    smoothed = smooth_volume(volume, voxel_mm=(voxel,) * 3, fwhm_mm=tuple(widths))
    profile = np.moveaxis(smoothed, axis, 0)[:, 1, 1]

    def gaussian(x, height, middle, fwhm):
        return height * np.exp(-0.5 * ((x - middle) * FWHM_PER_SIGMA / fwhm) ** 2)

    (_, middle, fwhm), _ = curve_fit(gaussian, place, profile, p0=(1.0, 0.0, 7.0))
    assert abs(fwhm) == pytest.approx(8.0, abs=0.05)
    # At 4 mm voxels a point of 6 mm is not fully sampled: what folds over at Nyquist moves its fit by 0.045 mm.
    assert middle == pytest.approx(0.0, abs=0.05)


@pytest.mark.parametrize("voxel", [2.0, 4.0])
@pytest.mark.parametrize("offset", [0.0, 0.3, 0.5])
def test_edge_of_6_mm_brought_to_8_mm_measures_8_mm(voxel, offset):
    place = (np.arange(60) - 30 + offset) * voxel

    def edge(x, middle, fwhm):
        return 0.5 * (1 + erf((x - middle) * FWHM_PER_SIGMA / (np.sqrt(2) * fwhm)))

    volume = np.broadcast_to(edge(place, 0.0, 6.0), (4, 4, 60))
    smoothed = smooth_volume(volume, voxel_mm=(voxel,) * 3, fwhm_mm=(0.0, 0.0, float(np.sqrt(28.0))))
    (middle, fwhm), _ = curve_fit(edge, place, smoothed[2, 2], p0=(0.1, 7.0))
    assert abs(fwhm) == pytest.approx(8.0, abs=0.05)
    assert middle == pytest.approx(0.0, abs=0.01)


@pytest.mark.parametrize("sigma", [2.0, 3.0, 4.5])
def test_wide_kernels_agree_with_the_sampled_gaussian(sigma):
    # From a sigma of 2 voxels on a sampled Gaussian errs by exp(-2 pi^2) = 3e-9 at Nyquist and truncation at 6 sigma
    # by less; scipy's `reflect` is the same edge rule.
    volume = np.abs(noise((64, 48, 50)))
    ours = smooth_volume(volume, voxel_mm=ONE, fwhm_mm=(sigma * FWHM_PER_SIGMA,) * 3)
    theirs = gaussian_filter(volume.astype(float), sigma, mode="reflect", truncate=6.0)
    assert np.abs(ours - theirs).max() <= 1e-5 * theirs.max()


@pytest.mark.parametrize("sigma", [1.0, 1.3])
def test_kernels_from_sigma_1_agree_with_the_sampled_gaussian_on_a_smooth_image(sigma):
    # Below a sigma of 2 the sampled Gaussian lets noise near Nyquist through twice; a resolved image has none there.
    volume = gaussian_filter(np.abs(noise((64, 48, 50))).astype(float), 1.5)
    ours = smooth_volume(volume, voxel_mm=ONE, fwhm_mm=(sigma * FWHM_PER_SIGMA,) * 3)
    theirs = gaussian_filter(volume, sigma, mode="reflect", truncate=6.0)
    assert np.abs(ours - theirs).max() <= 1e-4 * theirs.max()


@pytest.mark.parametrize("width", [1.0, 2.0, 6.0])
def test_nan_stay_nan_and_do_not_spread(width):
    volume = np.abs(noise((40, 41, 36))) + 5
    missing = np.zeros(volume.shape, bool)
    missing[10:20, 5:9, :] = True
    missing[30, 30, 30] = True
    volume[missing] = np.nan
    smoothed = smooth_volume(volume, voxel_mm=ONE, fwhm_mm=(width,) * 3)
    np.testing.assert_array_equal(np.isnan(smoothed), missing)
    sigmas = [width / FWHM_PER_SIGMA] * 3
    given_part = slow_smooth(np.where(missing, 0, volume), sigmas)
    weight = slow_smooth((~missing).astype(float), sigmas)
    np.testing.assert_allclose(smoothed[~missing], (given_part / weight)[~missing], rtol=5e-5)


def test_constants_are_kept_around_nan_and_a_lonely_voxel_keeps_its_value():
    volume = np.full((20, 20, 20), np.nan, np.float32)
    volume[4:9, 4:9, 4:9] = 12.5
    volume[17, 17, 17] = 12.5
    smoothed = smooth_volume(volume, voxel_mm=ONE, fwhm_mm=(9.0,) * 3)
    np.testing.assert_array_equal(smoothed, volume)
    assert np.isnan(smooth_volume(np.full((3, 3, 3), np.nan), voxel_mm=ONE, fwhm_mm=ONE)).all()


def test_large_and_negative_values_are_no_trouble():
    volume = noise((30, 30, 30)) * np.float32(1e30)  # its square is beyond single precision
    smoothed = smooth_volume(volume, voxel_mm=ONE, fwhm_mm=(3.0,) * 3)
    expected = slow_smooth(volume, [3.0 / FWHM_PER_SIGMA] * 3)
    assert np.abs(smoothed - expected).max() <= 1e-5 * np.abs(expected).max()


def test_big_endian_and_strided_input_are_the_same_image():
    volume = noise((30, 22, 18))
    expected = smooth_volume(volume, voxel_mm=ONE, fwhm_mm=(2.0,) * 3)
    swapped = smooth_volume(volume.astype(">f8"), voxel_mm=ONE, fwhm_mm=(2.0,) * 3)
    wide = np.repeat(volume, 2, axis=1)[:, ::2]
    np.testing.assert_array_equal(swapped, expected)
    np.testing.assert_array_equal(smooth_volume(wide, voxel_mm=ONE, fwhm_mm=(2.0,) * 3), expected)


@pytest.mark.parametrize(
    ("volume", "voxel_mm", "fwhm_mm", "error", "words"),
    [
        (np.ones((3, 3, 3), int), ONE, ONE, TypeError, "floating-point"),
        (np.ones((3, 3)), ONE, ONE, ValueError, "three-dimensional"),
        (np.ones((3, 0, 3)), ONE, ONE, ValueError, "three-dimensional"),
        (np.full((3, 3, 3), np.inf), ONE, ONE, ValueError, "infinite"),
        (np.full((3, 3, 3), 1e300), ONE, ONE, ValueError, "infinite"),
        (np.ones((3, 3, 3)), ONE, (1.0, -1.0, 1.0), ValueError, "negative"),
        (np.ones((3, 3, 3)), ONE, (1.0, float("nan"), 1.0), ValueError, "negative"),
        (np.ones((3, 3, 3)), (1.0, 0.0, 1.0), ONE, ValueError, "voxel_mm"),
        (np.ones((3, 3, 3)), (1.0, 1.0), ONE, ValueError, "three entries"),
    ],
)
def test_arguments_that_make_no_sense_are_refused_by_name(volume, voxel_mm, fwhm_mm, error, words):
    with pytest.raises(error, match=words):
        smooth_volume(volume, voxel_mm=voxel_mm, fwhm_mm=fwhm_mm)


def test_unknown_route_is_refused():
    with pytest.raises(ValueError, match="route"):
        smooth_volume(np.ones((3, 3, 3)), voxel_mm=ONE, fwhm_mm=ONE, route="fast")


PROBE = """
import sys
from evenblur import command
import numpy as np
from evenblur.smoothing import smooth_volume
volume = np.random.default_rng(5).random((70, 130, 90), dtype=np.float32)
for width in (1.0, 2.5, 6.0):
    sys.stdout.buffer.write(smooth_volume(volume, voxel_mm=(1.0,) * 3, fwhm_mm=(width,) * 3).tobytes())
"""


def probe(**settings: str) -> np.ndarray:
    environment = {key: value for key, value in os.environ.items() if not key.startswith(("OPENBLAS_", "NPY_"))}
    done = subprocess.run(
        [sys.executable, "-c", PROBE],
        env={**environment, "PYTHONPATH": str(SCRIPTS), **settings},
        capture_output=True,
        check=True,
    )
    return np.frombuffer(done.stdout, np.float32)


def test_same_bytes_twice_and_the_same_image_on_other_processors():
    first = probe()
    np.testing.assert_array_equal(probe(), first)
    # Other processors' code, as far as this one can run it; an unknown name would be ignored, which is harmless.
    for other in ({"OPENBLAS_CORETYPE": "Haswell"}, {"OPENBLAS_CORETYPE": "Sandybridge", "OPENBLAS_NUM_THREADS": "1"}):
        assert np.abs(probe(**other) - first).max() <= 1e-5 * first.max()
    found = np.show_config(mode="dicts")["SIMD Extensions"].get("found", [])
    plain = probe(NPY_DISABLE_CPU_FEATURES=" ".join(found), OPENBLAS_CORETYPE="Haswell")
    assert np.abs(plain - first).max() <= 1e-5 * first.max()
