"""The price of a target: what each candidate loses, checked against plans made for it and counts by hand."""

import csv
import io
import math
from pathlib import Path

import numpy as np
import pytest
from scipy import ndimage
from test_planning import FIXED, Builder

from evenblur.plan.price_page import COLUMNS, decision_lines, frozen_target, price_table, render_prices
from evenblur.plan.prices import drop_coarsest, price_targets
from evenblur.study.reading import Study
from evenblur.study.settings import Settings
from evenblur.study.yaml_reading import parse_yaml

TEMPLATES = Path(__file__).resolve().parents[2] / "workflow" / "report"


def study_of(built):
    """The builder's rows as a study."""
    by_setup = {row.setup: row for row in built.setups}
    return Study(built.settings, built.setups, built.phantoms, built.scans, by_setup)


def priced(built):
    plan = built.plan()
    records = {name: getattr(built, name) for name in ("scans_intake", "phantoms_intake", "resolution")}
    return plan, price_targets(study_of(built), plan=plan, **records)


def three_setups(**settings):
    built = Builder(**settings)
    for setup, width, scans in (("a-1", 5.0, 3), ("b-1", 6.0, 2), ("c-1", 8.0, 4)):
        built.setup(setup).phantom(setup, width, width - 0.5)
        for index in range(scans):
            built.scan(f"{setup[0]}{index}", setup)
    return built.scan("never", "a-1", acquired="2020-01-01")


def by_target(prices):
    return {price.in_plane_mm: price for price in prices.prices}


# Width + 2 x sqrt(0.05^2 + 0.2^2) = width + 0.4123, rounded up to 0.1 mm.
LIMITS = {"a-1": 5.5, "b-1": 6.5, "c-1": 8.5}


def test_each_period_in_use_and_the_round_figures_are_candidates():
    plan, prices = priced(three_setups())
    assert plan["target"]["in_plane_mm"] == LIMITS["c-1"]
    assert sorted(by_target(prices)) == [5.0, 5.5, 6.0, 6.5, 7.0, 8.0, 8.5, 10.0]
    origins = {width: price.origins for width, price in by_target(prices).items()}
    assert origins[8.5] == ("the plan's target", "set by c-1.p1")
    assert origins[6.5] == ("set by b-1.p1",)
    assert origins[7.0] == ("round figure",)


def test_what_a_target_loses_is_counted_by_hand():
    _, prices = priced(three_setups())
    table = {w: (p.lost_periods, p.scans_accepted, p.scans_lost) for w, p in by_target(prices).items()}
    assert table[10.0] == table[8.5] == ((), 9, 0)  # the scan without a phantom session counts nowhere
    assert table[8.0] == ((), 9, 0)  # 8.0 mm measured: at the target
    assert table[7.0] == (("c-1.p1",), 5, 4)
    assert table[6.0] == (("c-1.p1",), 5, 4)
    assert table[5.5] == (("b-1.p1", "c-1.p1"), 3, 6)
    assert table[5.0] == (("b-1.p1", "c-1.p1"), 3, 6)


def test_the_sentences_say_what_leaving_out_buys_and_costs():
    _, prices = priced(three_setups())
    assert prices.sentences == (
        "Without c-1.p1 the target falls from 8.5 mm to 6.5 mm at the cost of 4 scans.",
        "Without b-1.p1 as well the target falls from 6.5 mm to 5.5 mm at the cost of 2 scans (6 in all).",
    )


def test_a_setup_within_the_tolerance_costs_nothing():
    built = Builder().setup("a-1").setup("b-1").phantom("a-1", 6.0, 6.0).phantom("b-1", 6.4, 6.0)
    _, prices = priced(built.scan("a1", "a-1").scan("b1", "b-1"))
    assert prices.sentences == (
        "Without b-1.p1 the target falls from 6.9 mm to 6.5 mm at the cost of no scan; b-1.p1 stays in, within the "
        "tolerance of 0.3 mm.",
    )


def test_a_fixed_target_is_priced_beside_what_the_periods_would_set():
    plan, prices = priced(three_setups(**FIXED))
    assert plan["target"]["in_plane_mm"] == 8.0
    assert by_target(prices)[8.0].origins == ("the plan's target", "round figure")
    assert set(LIMITS.values()) <= set(by_target(prices))


def test_directions_are_kept_apart_where_the_study_says_so():
    built = Builder(target={"isotropic": False}).setup("a-1").setup("b-1")
    built.phantom("a-1", 5.0, 7.0).phantom("b-1", 6.0, 4.0).scan("a1", "a-1").scan("b1", "b-1")
    steps = [(d.without, d.in_plane_mm, d.axial_mm) for d in drop_coarsest(study_of(built), built.plan())]
    assert steps == [((), 6.5, 7.5), (("a-1.p1",), 6.5, 4.5)]
    _, prices = priced(built)
    assert prices.sentences[0].startswith("Without a-1.p1 the target falls from 6.5 mm in-plane and 7.5 mm axial to")


def test_a_declared_width_sets_no_candidate_but_can_be_lost():
    declared = {"declared_in_plane_mm": "9.0", "declared_axial_mm": "9.0", "declared_source": "invented"}
    built = three_setups().setup("d-1", **declared).scan("d0", "d-1")
    _, prices = priced(built)
    assert max(by_target(prices)) == 10.0
    assert by_target(prices)[8.5].lost_periods == ("d-1.declared",)


def test_the_white_noise_factor_is_the_spread_of_smoothed_white_noise():
    built = Builder(**FIXED).setup("a-1").phantom("a-1", 5.0, 5.0).scan("s1", "a-1")
    built.resolution["a-1-p1-0"]["fit"] = {"noise_correlation_mm": {"in_plane": 4.0, "axial": 4.0}}
    _, prices = priced(built)
    noise = by_target(prices)[8.0].noise["a-1.p1"]
    kernel = math.sqrt(64 - 25) / 2.354820045
    sample = np.random.default_rng(1).standard_normal((100, 100, 100))
    spread = ndimage.gaussian_filter(sample, [kernel / 2.0, kernel / 2.0, kernel / 3.0], mode="wrap").std()
    assert noise.white == pytest.approx(spread, rel=0.03)  # about 10,000 independent places
    assert noise.correlated is not None
    assert noise.white < noise.correlated < 1.0


def test_the_table_has_a_row_a_target():
    _, prices = priced(three_setups())
    rows = list(csv.DictReader(io.StringIO(price_table(prices)), delimiter="\t"))
    assert list(rows[0]) == list(COLUMNS)
    assert [float(row["target_in_plane_mm"]) for row in rows] == sorted(by_target(prices), reverse=True)
    assert rows[-1]["periods_lost"] == "b-1.p1;c-1.p1"


def test_the_frozen_block_is_refused_until_its_blanks_are_filled(tmp_path):
    block = frozen_target(8.5, 8.5)
    text = f"study: {{title: x}}\n{block}"
    with pytest.raises(ValueError, match="approval"):
        Settings.model_validate(parse_yaml(text))
    filled = (
        text.replace("by:  ", "by: a board").replace("on:  ", "on: 2026-03-01").replace("reason:  ", "reason: agreed")
    )
    settings = Settings.model_validate(parse_yaml(filled))
    assert (settings.target.choose, settings.target.in_plane_mm, settings.target.axial_mm) == ("fixed", 8.5, 8.5)


def test_the_lines_for_the_terminal_hold_prices_and_block():
    plan, prices = priced(three_setups())
    lines = list(decision_lines(study_of(three_setups()), plan, prices))
    assert lines[0].startswith("Target: 8.5 mm, set by c-1.p1 in-plane: 8 mm and 2 standard errors")
    assert prices.sentences[0] in lines
    assert frozen_target(8.5, 8.5).rstrip() in lines


def test_a_study_without_any_width_is_priced_at_the_round_figures():
    built = Builder().setup("a-1").scan("s1", "a-1")
    plan, prices = priced(built)
    assert [price.in_plane_mm for price in prices.prices] == [10.0, 8.0, 7.0, 6.0, 5.0]
    assert next(decision_lines(study_of(built), plan, prices)).startswith("No target could be set")
    assert "No target could be set" in render_prices(study_of(built), plan, prices, templates=TEMPLATES)


def test_the_page_is_self_contained_and_escapes_what_it_shows():
    built = three_setups(study={"title": "<b>Bold</b> & study"})
    plan, prices = priced(built)
    page = render_prices(study_of(built), plan, prices, templates=TEMPLATES)
    assert "&lt;b&gt;Bold&lt;/b&gt; &amp; study" in page
    assert "<b>Bold" not in page
    assert not any(sign in page for sign in ("http://", "https://", "<script", "src="))
    for price in prices.prices:
        assert f"{price.in_plane_mm:g}" in page
