"""Parts of a study that a cluster takes as one submission: whole, bounded, and steady when scans come and go."""

import pytest
from hypothesis import given
from hypothesis import strategies as st

from evenblur.errors import InputError
from evenblur.study.parts import cut_into_parts, parts_wanted
from evenblur.study.sites import sites_wanted

KEYS = st.sets(st.text("abc012-", min_size=1, max_size=6), max_size=60)


@given(KEYS, st.integers(1, 10))
def test_every_key_is_in_one_part_and_no_part_is_too_large(keys, most):
    parts = cut_into_parts(keys, most=most)
    assert sorted(key for part in parts.values() for key in part) == sorted(keys)
    assert all(1 <= len(part) <= most for part in parts.values())


@given(KEYS, st.text("xyz", min_size=1, max_size=6), st.integers(1, 10))
def test_a_further_key_changes_the_one_part_that_it_falls_into(keys, further, most):
    before, after = cut_into_parts(keys, most=most), cut_into_parts({*keys, further}, most=most)
    changed = [name for name, members in before.items() if after.get(name) != members]
    assert len(changed) <= 1
    # Where that part grew too large it was split; its pieces hold what it held.
    pieces = {key for name, members in after.items() if before.get(name) != members for key in members}
    assert pieces == {further, *(key for name in changed for key in before[name])}


def test_the_order_of_the_table_is_of_no_account():
    keys = [f"sub-{number:03d}" for number in range(50)]
    assert cut_into_parts(keys, most=7) == cut_into_parts(reversed(keys), most=7)


@pytest.mark.parametrize("given_value", [0, -3, "many", "2.5", ""])
def test_a_size_that_is_none_is_refused(given_value):
    with pytest.raises(InputError, match="give 1 or more"):
        parts_wanted({"scans_per_submission": given_value})


def test_an_unknown_site_is_refused_with_the_nearest_name():
    with pytest.raises(InputError, match="did you mean `quay`"):
        sites_wanted({"site": "mill,quai"}, ["quay", "mill"])
