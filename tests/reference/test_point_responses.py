"""Widths of sampled Gaussians read the NEMA NU 2 way: a known bias, and no other."""

import numpy as np
import pytest

from evenblur.phantoms.nema import response_widths
from evenblur.smoothing import smooth_volume
from reference_formulas import FWHM_PER_SIGMA, missing

SOURCE = (
    "NEMA NU 2: parabola through the top three samples, linear between samples (recipe from memory); "
    "bias of sampled Gaussians calculated apart from this code"
)
TENTH_TO_HALF = np.sqrt(np.log2(10.0))

# Samples a width: error of the half and of the tenth width in percent, smallest and largest over all places.
LIMITS = {2: (0.0, 10.4, 5.0, 15.2), 3: (1.9, 2.0, 3.1, 5.7), 4: (0.0, 1.7, 1.7, 2.8), 5: (0.3, 0.8, 0.6, 2.1)}
LIMITS[10] = (0.0, 0.2, 0.2, 0.5)

OFFSETS = np.linspace(-0.5, 0.5, 101)


def errors(responses, samples):
    """Smallest and largest error of both widths, percent."""
    widths = [response_widths(response, step_mm=1.0) for response in responses]
    half = np.array([w.half_mm for w in widths]) / samples - 1.0
    tenth = np.array([w.tenth_mm for w in widths]) / (samples * TENTH_TO_HALF) - 1.0
    return [100 * float(value) for value in (half.min(), half.max(), tenth.min(), tenth.max())]


def gaussians(samples):
    x = np.arange(-40.0, 41.0)
    return [np.exp(-0.5 * ((x - offset) * FWHM_PER_SIGMA / samples) ** 2) for offset in OFFSETS]


@pytest.mark.parametrize("samples", sorted(LIMITS))
def test_bias_on_sampled_gaussians(check, samples):
    check.close(
        f"error of half width (least, most) and tenth width (least, most) at {samples} samples a width",
        source=SOURCE,
        expected=LIMITS[samples],
        found=errors(gaussians(samples), samples),
        within=0.06,  # the table's one digit, and 101 places
        digits=1,
        unit="%",
    )


@pytest.mark.parametrize("samples", [4, 5, 10])
def test_bias_on_points_that_the_engine_smoothed(check, samples):
    sharp = 3.0  # at three samples a width folded waves are below 1e-3 of the peak
    volume = np.zeros((81, len(OFFSETS), 1))
    for place, response in enumerate(gaussians(sharp)):
        volume[:, place, 0] = response
    smoothed = smooth_volume(volume, voxel_mm=(1.0, 1.0, 1.0), fwhm_mm=(missing(sharp, samples), 0.0, 0.0))
    check.close(
        f"error of half and tenth width, points brought by the engine to {samples} samples a width",
        source=SOURCE,
        expected=LIMITS[samples],
        found=errors(smoothed[..., 0].T.astype(float), samples),
        within=0.1,
        digits=1,
        unit="%",
    )
