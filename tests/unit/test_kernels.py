"""The kernel along one axis, against its definition and an independent slow construction."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from evenblur.kernels import (
    PIECE,
    axis_matrix,
    banded_matrix,
    kernel_facts,
    kernel_reach,
    kernel_weights,
    split_matrix,
    transfer_function,
)
from evenblur.widths import FWHM_PER_SIGMA

WIDTHS = (0.3, 0.5, 0.7, 1.0, 1.5, 2.0, 3.0, 4.0, 6.0, 10.0, 20.0)  # voxels FWHM


def cosine_waves(length: int) -> np.ndarray:
    """Orthonormal waves cos(pi k (i + 1/2) / n), one a column, written down from their formula."""
    index, wave = np.arange(length)[:, None], np.arange(length)[None, :]
    waves = np.cos(np.pi * wave * (index + 0.5) / length)
    return waves / np.sqrt((waves**2).sum(axis=0))


def slow_matrix(length: int, sigma: float) -> np.ndarray:
    """The kernel's matrix from its definition: take apart into waves, multiply each, put together."""
    waves = cosine_waves(length)
    return (waves * np.exp(-0.5 * (sigma * np.pi * np.arange(length) / length) ** 2)) @ waves.T


def whole(split, length: int) -> np.ndarray:
    """A split matrix put together again in double precision."""
    spread = np.zeros((len(split.basis) * PIECE, len(split.basis) * split.rank))
    for index, basis in enumerate(split.basis.astype(float)):
        spread[index * PIECE : (index + 1) * PIECE, index * split.rank : (index + 1) * split.rank] = basis
    spread = spread[:length]
    return split.near + spread @ split.exchange.astype(float) @ spread.T


@pytest.mark.parametrize("length", [1, 2, 7, 64, 129])
@pytest.mark.parametrize("width", WIDTHS)
def test_matrix_is_the_definition_by_waves(length, width):
    # Both are double-precision sums of at most 129 terms below 1.
    sigma = width / FWHM_PER_SIGMA
    np.testing.assert_allclose(axis_matrix(length, sigma=sigma), slow_matrix(length, sigma), atol=1e-13)


@pytest.mark.parametrize("length", [16, 47, 128, 256])
@pytest.mark.parametrize("width", WIDTHS)
def test_single_precision_matrices_have_the_transfer_function_to_1e5_at_every_wave(length, width):
    sigma = width / FWHM_PER_SIGMA
    waves = cosine_waves(length)
    wanted = np.exp(-0.5 * (sigma * np.pi * np.arange(length) / length) ** 2)
    matrices = [banded_matrix(length, sigma)[1].astype(float)]
    if (split := split_matrix(length, sigma)) is not None:
        matrices.append(whole(split, length))
    for matrix in matrices:
        # The waves stay eigenvectors: what a wave becomes is itself times its factor, with no shift and no other wave.
        np.testing.assert_allclose(waves.T @ matrix @ waves, np.diag(wanted), atol=1e-5)


def test_narrow_kernels_on_long_axes_are_split():
    for width in (0.5, 1.0, 2.0, 3.0):
        assert split_matrix(256, width / FWHM_PER_SIGMA) is not None


@pytest.mark.parametrize("width", WIDTHS)
def test_rows_and_columns_add_up_to_one(width):
    # 3e-7: four times the rounding of a number near 1 in single precision (6e-8), for sums over rank and window.
    matrices = [banded_matrix(200, width / FWHM_PER_SIGMA)[1].astype(float)]
    if (split := split_matrix(200, width / FWHM_PER_SIGMA)) is not None:
        matrices.append(whole(split, 200))
    for matrix in matrices:
        np.testing.assert_allclose(matrix.sum(axis=0), 1.0, atol=3e-7)
        np.testing.assert_allclose(matrix.sum(axis=1), 1.0, atol=3e-7)


@settings(derandomize=True, deadline=None, max_examples=40)
@given(length=st.integers(1, 80), sigma=st.floats(0.0, 12.0))
def test_matrix_is_symmetric_and_commutes_with_a_flip(length, sigma):
    _, matrix = banded_matrix(length, sigma)
    np.testing.assert_array_equal(matrix, matrix.T)
    np.testing.assert_allclose(matrix, matrix[::-1, ::-1], atol=1e-7)  # one rounding of a weight below 1


def test_sigma_zero_is_the_identity():
    np.testing.assert_allclose(axis_matrix(9, sigma=0.0), np.eye(9), atol=1e-15)
    assert kernel_reach(9, sigma=0.0) == 0


def test_wide_kernel_weights_are_the_gaussian_curve():
    # At sigma 3 the aliased part of the curve's spectrum is below exp(-9 (2 pi)^2 / 8) = 6e-20 at zero frequency and
    # exp(-9 pi^2 / 2) = 5e-20 at Nyquist, so samples of the curve are the weights to rounding.
    place = np.arange(20)
    curve = np.exp(-0.5 * (place / 3.0) ** 2) / (3.0 * np.sqrt(2 * np.pi))
    np.testing.assert_allclose(kernel_weights(128, sigma=3.0)[:20], curve, atol=1e-15)


def test_half_the_variance_twice_is_the_kernel():
    np.testing.assert_allclose(
        axis_matrix(50, sigma=3.0) @ axis_matrix(50, sigma=4.0), axis_matrix(50, sigma=5.0), atol=1e-14
    )


def test_reach_leaves_out_less_than_asked():
    weights = kernel_weights(256, sigma=2.0)
    reach = kernel_reach(256, sigma=2.0, dropped=1e-4)
    assert 2 * np.abs(weights[reach + 1 : 257]).sum() <= 1e-4 < 2 * np.abs(weights[reach:257]).sum()


def test_noise_factor_of_a_wide_kernel_is_the_integral_of_the_squared_gaussian():
    # Sum of squared weights -> 1 / (2 sqrt(pi) sigma) an axis; rounded to six digits in the facts.
    facts = kernel_facts((128, 128, 128), sigma_voxels=(2.0, 3.0, 0.0))
    wanted = 1 / (2 * np.sqrt(np.pi) * 2.0) / (2 * np.sqrt(np.pi) * 3.0)
    assert facts.noise_variance_factor == pytest.approx(wanted, rel=1e-5)
    assert facts.largest_negative_lobe == 0.0


def test_negative_lobe_of_a_narrow_kernel_is_reported_as_a_share_of_the_centre():
    # Independent: the integral of exp(-s^2 w^2 / 2) cos(w m) over (0, pi), by the midpoint rule.
    sigma = 1.0 / FWHM_PER_SIGMA
    omega = (np.arange(20000) + 0.5) * np.pi / 20000
    spectrum = np.exp(-0.5 * (sigma * omega) ** 2)
    weights = [float(np.mean(spectrum * np.cos(omega * m))) for m in range(12)]
    facts = kernel_facts((256, 256, 1), sigma_voxels=(sigma, 0.3 * sigma, sigma))
    narrow = [float(np.mean(spectrum**0.09 * np.cos(omega * m))) for m in range(12)]
    wanted = min(min(weights) / weights[0], min(narrow) / narrow[0])
    # The ring of 512 places adds the tail of its next turn, about 1e-6.
    assert facts.largest_negative_lobe == pytest.approx(wanted, abs=5e-6)
    assert wanted < -0.01


def test_transfer_function_at_nyquist_half():
    # k = n / 2 is omega = pi / 2: exp(-pi^2 / 8) for sigma 1.
    assert transfer_function(8, sigma=1.0)[4] == pytest.approx(np.exp(-(np.pi**2) / 8), rel=1e-15)


@pytest.mark.parametrize(("length", "sigma"), [(0, 1.0), (4, -0.1), (4, float("nan")), (4, float("inf"))])
def test_lengths_and_sigmas_that_make_no_kernel_are_refused(length, sigma):
    for function in (transfer_function, kernel_weights, axis_matrix, kernel_reach):
        with pytest.raises(ValueError, match=r"length|sigma"):
            function(length, sigma=sigma)
