"""Facts about Gaussians, read off what the engine makes of points, edges, waves and noise."""

import numpy as np
import pytest

from evenblur.smoothing import plan_smoothing, smooth_volume
from evenblur.widths import FWHM_PER_SIGMA, missing_width
from reference_checks import CLOSED_FORM
from reference_formulas import crossings

WIDE_MM = 40.0
LINE = np.arange(512.0)
GAUSSIAN = "MathWorld, Gaussian Function, equations 8 and 14"


def along_line(values, fwhm_mm, **settings):
    """The engine on a line of voxels of 1 mm."""
    volume = np.asarray(values, dtype=float)[:, None, None]
    smoothed = smooth_volume(volume, voxel_mm=(1.0, 1.0, 1.0), fwhm_mm=(fwhm_mm, 0.0, 0.0), **settings)
    return smoothed[:, 0, 0].astype(float)


def test_widths_of_a_point(check):
    point = np.zeros(512)
    point[256] = 1.0
    peak = along_line(point, WIDE_MM)
    half, tenth = (np.diff(crossings(LINE, peak / peak.max(), level))[0] for level in (0.5, 0.1))
    check.close("half-height width over sigma", source=GAUSSIAN, expected=2.3548, found=FWHM_PER_SIGMA, within=5e-5)
    # Weights of 2e-6 in all are left out and go to the centre: up to 1e-4 of a peak of 0.023, and 1e-4 of the width.
    check.close("asked width of a point", source=CLOSED_FORM, expected=40.0, found=half, within=4e-3, unit="mm")
    check.close(
        "tenth to half width of a point",
        source=f"{CLOSED_FORM}: root of log2(10)",
        expected=np.sqrt(np.log2(10.0)),
        found=tenth / half,
        within=3e-4,
    )


def test_widths_of_an_edge(check):
    edge = along_line(np.where(LINE < 256, 0.0, 1.0), WIDE_MM)
    tenth, fifth, most, all_but = (crossings(LINE, edge, level)[0] for level in (0.1, 0.2, 0.8, 0.9))
    source = f"{CLOSED_FORM}: error function"
    # Voxels that are points, not averages, make the edge narrower by h^2 / 12: 0.01 % of the width at 40 voxels.
    check.close(
        "10 to 90 % width of an edge over the half-height width",
        source=source,
        expected=1.088450,
        found=(all_but - tenth) / WIDE_MM,
        within=3e-4,
        digits=5,
    )
    check.close(
        "20 to 80 % width of an edge over the half-height width",
        source=source,
        expected=0.714807,
        found=(most - fifth) / WIDE_MM,
        within=3e-4,
        digits=5,
    )
    steepest = np.max(np.diff(edge)) * WIDE_MM
    check.close("slope of an edge times the width", source=source, expected=0.939437, found=steepest, within=5e-4)


@pytest.mark.parametrize("route", ["image", "fourier"])
def test_transfer_function(check, route):
    wave_number = np.array([24, 51, 130])
    omega = np.pi * wave_number / LINE.size
    for amplitude, place in ((0.5, 0.441271), (0.1, 0.804268)):
        found = []
        for k, w in zip(wave_number, omega, strict=True):
            wave = np.cos(np.pi * k * (LINE + 0.5) / LINE.size)
            smoothed = along_line(wave, place / (w / (2 * np.pi)), route=route)
            found.append(float(smoothed @ wave / (wave @ wave)))
        check.close(
            f"transfer function at {place} cycles a width, {route} route, three waves",
            source=f"{GAUSSIAN}: exp(-2 pi^2 sigma^2 f^2)",
            expected=[amplitude] * 3,
            found=found,
            within=1e-5,
            digits=6,
        )


def test_missing_widths(check):
    pairs = [(3, 5), (4, 8), (5, 7), (5, 8), (6, 8), (6.5, 7), (7, 8), (4.5, 6)]
    check.close(
        "width missing from 3 to 5, 4 to 8, 5 to 7, 5 to 8, 6 to 8, 6.5 to 7, 7 to 8, 4.5 to 6",
        source=f"{CLOSED_FORM}: quadrature",
        expected=[4.0, 6.928203, 4.898979, 6.244998, 5.291503, 2.598076, 3.872983, 3.968627],
        found=[missing_width(*pair) for pair in pairs],
        within=1e-6,
        digits=6,
        unit="mm",
    )


# White noise after a filter of width F (voxels) has 0.664282 / F of its variance left, an axis.
A_WIDTH = 1.0 / (2.0 * np.sqrt(np.pi)) * FWHM_PER_SIGMA


def test_noise_factor_of_the_kernel(check):
    widths = [2.0, 3.0, 4.0, 6.0, 8.0]
    for axes, tabulated in (
        (1, [0.332141, 0.221427, 0.166071, 0.110714, 0.083035]),
        (2, [0.110318, 0.049030, 0.027580, 0.012258, 0.006895]),
        (3, [0.036641, 0.010857, 0.004580, 0.001357, 0.000573]),
    ):
        plans = [
            plan_smoothing(
                (256, 256, 256), voxel_mm=(1.0, 1.0, 1.0), fwhm_mm=tuple(w if k < axes else 0.0 for k in range(3))
            )
            for w in widths
        ]
        assert tabulated == pytest.approx([(A_WIDTH / w) ** axes for w in widths], abs=1e-6)
        check.close(
            f"noise variance left by a kernel of 2, 3, 4, 6, 8 voxels along {axes} axes",
            source=f"{CLOSED_FORM}: product of 0.664282 voxel / width",
            expected=tabulated,
            found=[plan.facts.noise_variance_factor for plan in plans],
            # At two voxels the waves beyond Nyquist, which a grid lacks, are 1.6e-4 of the integral, an axis.
            within=6e-5,
            digits=6,
        )


def test_white_noise_through_the_engine(check):
    noise = np.random.default_rng(11).standard_normal((144, 144, 144)).astype(np.float32)
    inner = (slice(8, -8),) * 3  # mirrored ends count their neighbours twice
    before = float(np.var(noise[inner], dtype=float))
    for axes, expected in ((1, 0.221427), (2, 0.049030), (3, 0.010857)):
        widths = tuple(3.0 if k < axes else 0.0 for k in range(3))
        after = smooth_volume(noise, voxel_mm=(1.0, 1.0, 1.0), fwhm_mm=widths)[inner]
        # Voxels that speak for themselves: the number over (sqrt(2 pi) sigma) an axis. Four standard errors.
        alone = after.size / (np.sqrt(2 * np.pi) * 3.0 / FWHM_PER_SIGMA) ** axes
        check.close(
            f"variance left of white noise smoothed by 3 voxels along {axes} axes, over the closed form",
            source=f"{CLOSED_FORM}: product of 0.664282 voxel / width",
            expected=1.0,
            found=float(np.var(after, dtype=float)) / before / expected,
            within=round(4.0 * float(np.sqrt(2.0 / alone)), 4),
        )
