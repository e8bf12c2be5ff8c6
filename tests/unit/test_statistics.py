"""Delete-one-block jackknife against closed forms and against refitting without each block."""

import numpy as np
import pytest

from evenblur.statistics import block_jackknife, jackknife, t_interval, two_halves

EXACT = 1e-9  # float64 arithmetic on well-scaled numbers of order one


def test_jackknife_of_the_mean_is_the_textbook_standard_error():
    data = np.random.default_rng(1).normal(size=30)
    without = [(data.sum() - x) / 29 for x in data]
    se, df = jackknife(without)
    assert se == pytest.approx(data.std(ddof=1) / np.sqrt(30), rel=EXACT)
    assert df == 29


def test_jackknife_works_column_by_column():
    data = np.random.default_rng(2).normal(size=(15, 2))
    without = (data.sum(axis=0) - data) / 14
    se, _ = jackknife(without)
    np.testing.assert_allclose(se, data.std(axis=0, ddof=1) / np.sqrt(15), rtol=EXACT)


@pytest.mark.parametrize("count", [1, 11])
def test_fewer_than_twelve_blocks_give_no_standard_error(count):
    assert jackknife(np.arange(float(count))) == (None, None)
    fit = block_jackknife(np.ones(count), jacobian=np.ones((count, 1)), blocks=np.arange(count))
    assert fit.se is None
    assert fit.df is None
    assert fit.blocks == count


def test_block_jackknife_of_a_line_equals_refitting_without_each_block():
    rng = np.random.default_rng(3)
    x = np.linspace(0, 1, 240)
    design = np.column_stack([np.ones_like(x), x, x**2])
    data = design @ [1.0, 2.0, -3.0] + rng.normal(size=x.size)
    blocks = rng.integers(0, 20, size=x.size)
    best = np.linalg.lstsq(design, data, rcond=None)[0]
    refits = [np.linalg.lstsq(design[blocks != k], data[blocks != k], rcond=None)[0] for k in range(20)]
    spread = np.sum((np.array(refits) - np.mean(refits, axis=0)) ** 2, axis=0)
    fit = block_jackknife(data - design @ best, jacobian=design, blocks=blocks)
    np.testing.assert_allclose(fit.se, np.sqrt(19 / 20 * spread), rtol=1e-8)  # two solvers of the same equations
    np.testing.assert_allclose(fit.leave_one_out + best, refits, atol=1e-8)


def test_scale_of_the_parameters_does_not_matter():
    rng = np.random.default_rng(4)
    design = rng.normal(size=(100, 2))
    residuals = rng.normal(size=100)
    blocks = np.arange(100) // 5
    plain = block_jackknife(residuals, jacobian=design, blocks=blocks)
    scaled = block_jackknife(residuals, jacobian=design * [1e9, 1e-9], blocks=blocks)
    np.testing.assert_allclose(scaled.se * [1e9, 1e-9], plain.se, rtol=1e-8)


def test_block_standard_error_holds_for_correlated_data_where_single_data_do_not():
    # Data come in runs of five equal values: the mean of 150 has the error of a mean of 30.
    rng = np.random.default_rng(5)
    data = np.repeat(rng.normal(size=30), 5)
    centred = data - data.mean()
    fit = block_jackknife(centred, jacobian=np.ones((150, 1)), blocks=np.arange(150) // 5)
    assert fit.se[0] == pytest.approx(data[::5].std(ddof=1) / np.sqrt(30), rel=EXACT)


def test_degrees_of_freedom_are_blocks_minus_one_for_equal_blocks_and_fewer_for_unequal_ones():
    equal = block_jackknife(np.ones(40), jacobian=np.ones((40, 1)), blocks=np.arange(40) // 2)
    assert equal.df[0] == pytest.approx(19, rel=EXACT)
    # One block of 100 data and 20 of one: (sum v)^2 / sum v^2 = 120^2 / (100^2 + 20) = 1.437, times 20 / 21.
    labels = np.concatenate([np.zeros(100, int), np.arange(1, 21)])
    unequal = block_jackknife(np.ones(120), jacobian=np.ones((120, 1)), blocks=labels)
    assert unequal.df[0] == pytest.approx(14400 / 10020 * 20 / 21, rel=EXACT)


def test_data_with_negative_labels_belong_to_no_block():
    labels = np.concatenate([np.full(10, -1), np.arange(20)])
    fit = block_jackknife(np.ones(30), jacobian=np.ones((30, 1)), blocks=labels)
    assert fit.blocks == 20


def test_a_parameter_that_only_one_block_determines_gives_no_standard_error():
    design = np.ones((30, 2))
    design[1:, 1] = 0.0
    fit = block_jackknife(np.linspace(-1, 1, 30), jacobian=design, blocks=np.arange(30) // 2)
    assert fit.se is None
    assert fit.blocks == 15


def test_halves_are_the_fits_to_even_and_odd_blocks():
    rng = np.random.default_rng(6)
    x = np.linspace(0, 1, 160)
    design = np.column_stack([np.ones_like(x), x])
    data = design @ [1.0, 2.0] + rng.normal(size=x.size)
    blocks = np.arange(160) // 10
    best = np.linalg.lstsq(design, data, rcond=None)[0]
    halves = two_halves(data - design @ best, jacobian=design, blocks=blocks)
    even = np.linalg.lstsq(design[blocks % 2 == 0], data[blocks % 2 == 0], rcond=None)[0]
    odd = np.linalg.lstsq(design[blocks % 2 == 1], data[blocks % 2 == 1], rcond=None)[0]
    np.testing.assert_allclose(halves.first + best, even, atol=1e-9)
    np.testing.assert_allclose(halves.difference, even - odd, atol=1e-9)


def test_error_of_the_difference_of_two_halves_of_a_mean():
    data = np.random.default_rng(7).normal(size=24)
    halves = two_halves(data - data.mean(), jacobian=np.ones((24, 1)), blocks=np.arange(24))
    expected = np.sqrt(data[::2].var(ddof=1) / 12 + data[1::2].var(ddof=1) / 12)
    assert halves.se[0] == pytest.approx(expected, rel=EXACT)


def test_few_blocks_give_halves_without_an_error():
    halves = two_halves(np.arange(10.0), jacobian=np.ones((10, 1)), blocks=np.arange(10))
    assert halves.difference[0] == pytest.approx(-1.0, rel=EXACT)  # mean of 0, 2, .. 8 minus mean of 1, 3, .. 9
    assert halves.se is None


def test_halves_that_leave_a_parameter_open_are_no_halves():
    design = np.column_stack([np.ones(20), np.arange(20) % 2])
    assert two_halves(np.ones(20), jacobian=design, blocks=np.arange(20)) is None
    assert two_halves(np.ones(20), jacobian=np.ones((20, 1)), blocks=np.zeros(20, int)) is None


def test_t_interval_uses_the_published_quantile():
    low, high = t_interval(10.0, 1.0, 10.0)
    assert high - 10.0 == pytest.approx(2.228, abs=5e-4)  # Student's table: t(0.975; 10) = 2.228
    assert 10.0 - low == pytest.approx(2.228, abs=5e-4)
    assert t_interval(10.0, None, None) is None


def test_jackknife_interval_covers_the_truth_as_often_as_it_says():
    rng = np.random.default_rng(8)
    hits = 0
    for _ in range(400):
        data = rng.normal(3.0, 2.0, size=48)
        fit = block_jackknife(data - data.mean(), jacobian=np.ones((48, 1)), blocks=np.arange(48) // 4)
        low, high = t_interval(data.mean(), float(fit.se[0]), float(fit.df[0]))
        hits += low <= 3.0 <= high
    # Binomial with p = 0.95, n = 400: standard deviation 4.4, so 380 +- 4 of them.
    assert 362 <= hits <= 398


@pytest.mark.parametrize(
    ("call", "word"),
    [
        (lambda: jackknife(np.full(20, np.nan)), "leave_one_out"),
        (lambda: jackknife(np.zeros((12, 2, 2))), "leave_one_out"),
        (lambda: block_jackknife(np.ones(5), jacobian=np.ones((4, 1)), blocks=np.arange(5)), "jacobian"),
        (lambda: block_jackknife(np.ones(5), jacobian=np.ones((5, 1)), blocks=np.ones(5)), "blocks"),
        (lambda: two_halves(np.full(5, np.inf), jacobian=np.ones((5, 1)), blocks=np.arange(5)), "residuals"),
        (lambda: t_interval(1.0, 1.0, 5.0, level=1.0), "level"),
        (lambda: t_interval(1.0, -1.0, 5.0), "se"),
    ],
)
def test_errors_name_the_argument(call, word):
    with pytest.raises(ValueError, match=word):
        call()
