"""The site effect of a quantity against a general statistics library and simulations."""

import numpy as np
import pandas as pd
import pytest
from statsmodels.formula.api import ols
from statsmodels.stats.anova import anova_lm
from statsmodels.stats.oneway import confint_effectsize_oneway

from evenblur.site_effect.record import compare_regions
from evenblur.site_effect.variance import site_variance

UNEQUAL = {"quay": [4.1, 4.4, 3.9, 4.0], "mill": [5.0, 5.2], "fern": [4.6, 4.4, 4.9], "moor": [3.8, 4.2, 4.1, 4.4, 4.0]}


def table(values):
    rows = [(site, value) for site, group in values.items() for value in group]
    return anova_lm(ols("value ~ C(site)", pd.DataFrame(rows, columns=["site", "value"])).fit())


def test_the_analysis_of_variance_is_that_of_a_general_library():
    found, expected = site_variance(UNEQUAL), table(UNEQUAL)
    assert found.f == pytest.approx(expected["F"].iloc[0], rel=1e-9)
    assert found.p == pytest.approx(expected["PR(>F)"].iloc[0], rel=1e-9)
    squares = expected["sum_sq"]
    assert found.eta_squared == pytest.approx(squares.iloc[0] / squares.sum(), rel=1e-9)


def test_the_interval_of_eta_squared_is_that_of_a_general_library():
    found = site_variance(UNEQUAL)
    expected = confint_effectsize_oneway(found.f, (3, 10), nobs=14)
    # The library stops its search for the limits at about 1e-5 of the probability.
    assert found.eta_interval == pytest.approx(tuple(map(float, expected.eta2)), abs=1e-4)


def test_random_effects_by_hand():
    # Two sites, two scans each: means 1.5 and 5.5, B = 16, W = 0.5, n0 = 2: between (16 - 0.5) / 2 = 7.75.
    found = site_variance({"quay": [1.0, 2.0], "mill": [5.0, 6.0]})
    assert found.share == pytest.approx(7.75 / 8.25)
    assert found.variation == pytest.approx(np.sqrt(8.0) / 3.5)


def test_the_share_finds_what_a_simulation_put_in_and_its_interval_covers_it():
    rng = np.random.default_rng(3)
    true, shares, covered, runs = 0.5, [], 0, 300
    for _ in range(runs):
        sites = rng.normal(10.0, 1.0, 8)
        found = site_variance({str(k): rng.normal(site, 1.0, 10) for k, site in enumerate(sites)})
        shares.append(found.share)
        covered += found.share_interval[0] <= true <= found.share_interval[1]
    assert np.mean(shares) == pytest.approx(true, abs=0.05)
    assert 0.92 <= covered / runs <= 0.98  # 95 % with three standard errors of 1.3 %


def test_one_scan_a_site_gives_a_variation_and_no_share():
    found = site_variance({"quay": [1.0], "mill": [3.0]})
    assert (found.share, found.eta_squared, found.f) == (None, None, None)
    assert found.variation == pytest.approx(np.sqrt(2.0) / 2.0)


@pytest.mark.parametrize("values", [{"quay": [1.0, 2.0]}, {"quay": [1.0], "mill": []}])
def test_too_little_is_refused(values):
    with pytest.raises(ValueError, match="two sites"):
        site_variance(values)


def test_regions_are_divided_by_their_reference_before_sites_are_compared():
    # Every scan has its own dose; over the reference all are alike.
    scans = [("s1", "quay", 2.0), ("s2", "quay", 4.0), ("s3", "mill", 3.0), ("s4", "mill", 8.0)]
    cortex = [(name, site, 1.5 * dose, 1.2 * dose) for name, site, dose in scans]
    cerebellum = [(name, site, dose, dose) for name, site, dose in scans]
    rows = compare_regions({"cortex": cortex, "cerebellum": cerebellum}, {"cerebellum"})
    by_name = {row["region"]: row for row in rows}
    assert by_name["cortex"]["divided"]
    assert by_name["cortex"]["before"]["variation"] == pytest.approx(0.0, abs=1e-12)
    assert by_name["cerebellum"]["before"]["variation"] == pytest.approx(np.std([3.0, 5.5], ddof=1) / 4.25, abs=1e-6)
    assert not by_name["cerebellum"]["divided"]


def test_a_region_at_one_site_says_why_it_is_not_compared():
    rows = compare_regions({"cortex": [("s1", "quay", 1.0, 1.0)]}, set())
    assert rows[0]["why"] == "fewer than two sites have a value of it"
