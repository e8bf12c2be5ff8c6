"""What every practitioner knows about smoothing holds for the engine."""

import numpy as np
import pytest

from evenblur.kernels import kernel_reach
from evenblur.smoothing import plan_smoothing, smooth_volume
from reference_checks import CLOSED_FORM, NO_SOURCE
from reference_formulas import FWHM_PER_SIGMA

UNIT = (1.0, 1.0, 1.0)


def along_line(values, fwhm, **settings):
    volume = np.asarray(values, dtype=float)[:, None, None]
    return smooth_volume(volume, voxel_mm=UNIT, fwhm_mm=(fwhm, 0.0, 0.0), **settings)[:, 0, 0].astype(float)


def wave_fit(index, values, omega):
    """Amplitude, phase (radians) and largest misfit of the wave of this frequency in values."""
    design = np.stack([np.cos(omega * index), -np.sin(omega * index)], axis=1)
    (c, s), *_ = np.linalg.lstsq(design, values, rcond=None)
    return float(np.hypot(c, s)), float(np.arctan2(s, c)), float(np.max(np.abs(design @ [c, s] - values)))


def test_waves_keep_frequency_and_phase(check):
    index, phase = np.arange(600.0), 0.7
    inner = slice(60, -60)  # a wave that does not fit the field is bent at the mirrored ends
    for omega in (0.11, 0.5, 1.3):
        wave = np.cos(omega * index + phase)
        amplitude, found, misfit = wave_fit(index[inner], along_line(wave, 3.0)[inner], omega)
        check.close(
            f"phase (radians) and amplitude of a wave of {omega} radians a voxel, phase 0.7, smoothed by 3 voxels",
            source=f"{CLOSED_FORM}: a symmetric kernel has a real transfer function",
            expected=[phase, np.exp(-0.5 * (omega * 3.0 / FWHM_PER_SIGMA) ** 2)],
            found=[found, amplitude],
            within=2e-5,
            digits=6,
        )
        assert misfit < 2e-5  # no other frequency has come in
        # An unsymmetric kernel: the frequency stays, the phase moves by the argument of its transfer function.
        weights = np.array([0.2, 0.5, 0.3])
        transfer = np.sum(weights * np.exp(-1j * omega * np.arange(3)))
        shifted = np.convolve(wave, weights)[: index.size]
        amplitude, found, misfit = wave_fit(index[inner], shifted[inner], omega)
        check.close(
            f"phase (radians) of the same wave, {omega} radians a voxel, under an unsymmetric kernel",
            source=f"{CLOSED_FORM}: argument of the transfer function",
            expected=phase + float(np.angle(transfer)),
            found=found,
            within=1e-9,
            digits=6,
        )
        assert misfit < 1e-9
        assert abs(found - phase) > 0.1


def test_the_mean_is_kept(check):
    volume = np.random.default_rng(3).gamma(2.0, 500.0, (48, 40, 36))
    for route in ("image", "fourier"):
        smoothed = smooth_volume(volume, voxel_mm=(2.0, 2.0, 3.0), fwhm_mm=(7.0, 7.0, 5.0), route=route)
        check.close(
            f"mean after over mean before, {route} route",
            source=f"{CLOSED_FORM}: the kernel's sum is one",
            expected=1.0,
            found=float(smoothed.mean(dtype=float) / volume.mean()),
            within=1e-6,
            digits=7,
        )


def test_a_peak_suffers_more_than_a_block(check):
    kept = []
    for size in (1, 3, 9, 15):
        volume = np.zeros((41, 41, 41))
        volume[tuple(slice(20 - size // 2, 21 + size // 2) for _ in range(3))] = 1.0
        kept.append(float(smooth_volume(volume, voxel_mm=UNIT, fwhm_mm=(5.0, 5.0, 5.0)).max()))
    # Sums of a sampled Gaussian, which at 5 voxels a width is what the engine's kernel is to 1e-6.
    weights = np.exp(-0.5 * (np.arange(-40, 41) * FWHM_PER_SIGMA / 5.0) ** 2)
    weights /= weights.sum()
    expected = [float(weights[40 - size // 2 : 41 + size // 2].sum() ** 3) for size in (1, 3, 9, 15)]
    assert expected == sorted(expected)
    check.close(
        "share of the maximum that a cube of 1, 3, 9, 15 voxels keeps under 5 voxels",
        source=f"{CLOSED_FORM}: sums of Gaussian weights",
        expected=expected,
        found=kept,
        within=2e-5,
    )


def test_image_and_fourier_routes_agree(check):
    volume = np.random.default_rng(5).gamma(2.0, 500.0, (40, 56, 72))
    for fwhm in ((1.5, 2.5, 4.0), (12.0, 30.0, 60.0)):
        made = [smooth_volume(volume, voxel_mm=UNIT, fwhm_mm=fwhm, route=route) for route in ("image", "fourier")]
        apart = float(np.max(np.abs(made[0] - made[1])) / volume.max())
        check.inside(
            f"largest difference of the two routes over the maximum, widths {fwhm[0]:g}, {fwhm[1]:g}, {fwhm[2]:g}",
            source="convolution theorem",
            low=0.0,
            high=1e-5,
            found=apart,
            digits=7,
        )


def test_wide_kernels_cost_less_in_the_fourier_domain(check):
    # Multiplications and additions a voxel: a direct convolution pays for every weight, a transform for log2 n.
    length = 256
    fourier = 3 * 2 * 2.5 * np.log2(length)  # three axes, there and back, split-radix count of a real transform
    narrow, wide = ((2.0 * kernel_reach(length, sigma=w / FWHM_PER_SIGMA) + 1) for w in (4.0, 40.0))
    check.holds(
        "operations a voxel of a direct convolution with 4 and with 40 voxels along three axes, and by transforms",
        source=f"{NO_SOURCE}: counts of weights, 2.5 n log2 n for a real transform",
        expected="direct is cheaper at 4 voxels, transforms at 40",
        found=f"direct {3 * 2 * narrow:.0f} and {3 * 2 * wide:.0f}, transforms {fourier:.0f}",
        true=3 * 2 * narrow < fourier < 3 * 2 * wide,
    )
    # Where all three axes are done in one go the count of weights is cubed, and the narrow kernel loses too.
    check.holds(
        "operations a voxel of a direct convolution that is not split into axes, 4 voxels",
        source=f"{NO_SOURCE}: cube of the count of weights",
        expected="transforms are cheaper",
        found=f"direct {2 * narrow**3:.0f}, transforms {fourier:.0f}",
        true=2 * narrow**3 > fourier,
    )


def test_the_engine_takes_the_fourier_route_for_long_axes_only(check):
    def routes(length, width):
        plan = plan_smoothing((length, 8, 8), voxel_mm=UNIT, fwhm_mm=(width, 0.0, 0.0))
        return plan.route[0]

    found = (routes(64, 3.0), routes(4096, 2000.0))
    check.holds(
        "route chosen for 3 voxels along 64 and for 2000 along 4096",
        source=NO_SOURCE,
        expected="a matrix, the cosine transform",
        found=f"{found[0]}, {found[1]}",
        true=found[0] != "cosine" and found[1] == "cosine",
    )


def test_smoothing_cannot_be_undone_where_frequencies_are_gone(check):
    index = np.arange(256.0)
    omega = np.pi * 128 / 256
    base = 1.0 + 0.2 * np.cos(np.pi * 4 * (index + 0.5) / 256)
    wave = 0.5 * np.cos(omega * (index + 0.5))
    width = 10.0
    transfer = np.exp(-0.5 * (omega * width / FWHM_PER_SIGMA) ** 2)
    for route in ("image", "fourier"):
        with_wave, without = along_line(base + wave, width, route=route), along_line(base, width, route=route)
        left = float(np.max(np.abs(with_wave - without)))
        # The rounding of what is left is larger than what the wave has left: its inverse would amplify that.
        check.inside(
            f"largest trace of a wave of amplitude 0.5 at half the Nyquist frequency after 10 voxels, {route} route",
            source=f"{CLOSED_FORM}: its amplitude is {0.5 * transfer:.1e}, rounding of single precision 1e-7",
            low=0.0,
            high=2e-6,
            found=left,
            digits=7,
        )
        weights = np.cos(omega * (index + 0.5))
        restored = float(with_wave @ weights / (weights @ weights)) / transfer
        assert abs(restored - 0.5) > 0.5  # the inverse filter gives rounding noise, many times the wave


@pytest.mark.parametrize("route", ["image", "fourier"])
def test_where_frequencies_are_left_they_can_be_given_back(check, route):
    index = np.arange(256.0)
    wave = np.cos(np.pi * 40 * (index + 0.5) / 256)
    transfer = np.exp(-0.5 * (np.pi * 40 / 256 * 3.0 / FWHM_PER_SIGMA) ** 2)
    smoothed = along_line(wave, 3.0, route=route)
    check.close(
        f"amplitude of a slow wave after smoothing by 3 voxels and the inverse filter, {route} route",
        source=f"{CLOSED_FORM}: the counterpart of the check above",
        expected=1.0,
        found=float(smoothed @ wave / (wave @ wave)) / transfer,
        within=1e-4,
        digits=5,
    )
