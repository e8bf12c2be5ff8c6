"""A new study from a BIDS data set: its sites, its setups and their labels."""

import string
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from bids_tree import Bids, begin, column
from evenblur.newstudy.found import FoundImage, Look
from evenblur.newstudy.labels import hashed_labels, named_labels, site_label
from evenblur.newstudy.proposing import propose
from evenblur.study.problems import StudyError
from evenblur.study.reading import load_study
from evenblur.study.rows import SetupRow


@pytest.fixture
def bids(tmp_path):
    return Bids(tmp_path / "a data set")


@pytest.fixture
def study(tmp_path):
    return tmp_path / "my study"


# --- Sites and setups


def test_institutions_become_hashed_labels_and_their_names_stand_nowhere(bids, study, capsys):
    # printf 'plantedclinic of quay' | sha256sum
    label = "site-af93f4"
    bids.image("a", day="2026-02-03")
    bids.image("b", day="2026-02-03", InstitutionName=" PLANTEDCLINIC  of Quay")
    rows = begin(study, bids)
    assert column(rows["setups"], "site") == [label]
    written = "".join(path.read_text(encoding="utf-8") for path in (study / "config").iterdir())
    assert "plantedclinic" not in (written + capsys.readouterr().out).lower()


def test_institutions_keep_their_names_where_asked(bids, study):
    bids.image("a", day="2026-02-03")
    assert column(begin(study, bids, options=["--keep-names"])["setups"], "site") == ["Plantedclinic-of-Quay"]


def test_an_institution_that_a_site_column_names_is_that_site(bids, study):
    bids.table("participants.tsv", "participant_id|site", "sub-a|quay", "sub-b|n/a")
    bids.image("a", day="2026-02-03")
    bids.image("b", day="2026-02-03")
    bids.image("phantom1", day="2026-01-12")
    rows = begin(study, bids)
    assert column(rows["setups"], "setup") == ["quay-1"]
    assert {*column(rows["scans"], "setup"), *column(rows["phantoms"], "setup")} == {"quay-1"}


def test_setups_are_told_apart_by_scanner_and_reconstruction(bids, study):
    bids.image("a", day="2026-02-03")
    bids.image(
        "b", day="2026-02-03", ReconMethodName="ORDERED  subsets", ReconFilterSize=[5.0], ReconFilterType=["gaussian"]
    )
    bids.image("c", day="2026-02-03", ReconMethodName="Ordered subsets", ReconFilterSize=5.0)
    bids.image("d", day="2026-02-03", ManufacturersModelName="Ondel 64")
    bids.image("e", day="2026-02-03", ReconMethodParameterValues=[4, 16])
    owner = {row["subject"]: row["setup"] for row in begin(study, bids)["scans"]}
    assert owner["a"] == owner["c"]
    assert len({owner[name] for name in "ade"}) == 3


def test_an_image_that_tells_little_joins_the_only_setup_that_fits(bids, study):
    bids.image("a", day="2026-02-03")
    bids.image("b", day="2026-02-03", fields={"InstitutionName": "Plantedclinic of Quay"})
    rows = begin(study, bids)
    assert len(rows["setups"]) == 1
    assert len({*column(rows["scans"], "setup")}) == 1


def test_an_image_that_several_setups_fit_has_an_empty_cell_with_a_note(bids, study):
    bids.image("a", day="2026-02-03")
    bids.image("b", day="2026-02-03", ManufacturersModelName="Ondel 64")
    bids.image("c", day="2026-02-03", fields={"InstitutionName": "Plantedclinic of Quay"})
    row = begin(study, bids)["scans"][2]
    assert row["setup"] == ""
    assert "setup: several fit" in row["note"]


def test_a_site_that_nothing_tells_is_an_empty_cell_that_the_check_names(bids, study, capsys):
    bids.image("a", fields={})
    begin(study, bids)
    said = capsys.readouterr().out
    assert "To fill in: config/setups.tsv, column site, in 1 of 1 rows" in said
    assert "To fill in: config/scans.tsv, column acquired, in 1 of 1 rows" in said
    with pytest.raises(StudyError) as stopped:
        load_study(study)
    assert str(stopped.value).splitlines() == [
        "config/setups.tsv, row 2, site: the cell is empty; write the site's label",
        "config/scans.tsv, row 2, acquired: the cell is empty; write the day, as 2026-03-31",
    ]


def test_every_needed_empty_cell_is_listed_at_once(bids, study):
    bids.image("phantom1", fields={})
    bids.image("a", fields={})
    begin(study, bids)
    with pytest.raises(StudyError) as stopped:
        load_study(study)
    places = {(problem.file, problem.column) for problem in stopped.value.problems}
    assert places == {
        ("config/setups.tsv", "site"),
        ("config/phantoms.tsv", "kind"),
        ("config/phantoms.tsv", "acquired"),
        ("config/scans.tsv", "acquired"),
    }
    assert all(problem.row == 2 and problem.mend != "fill it" for problem in stopped.value.problems)


def test_subjects_of_two_data_sets_stay_apart(tmp_path, study):
    one, two = Bids(tmp_path / "one"), Bids(tmp_path / "two")
    one.image("01", day="2026-02-03")
    two.image("01", day="2026-02-04", InstitutionName="Another")
    two.image("02", day="2026-02-04", InstitutionName="Another")
    rows = begin(study, one, two)["scans"]
    assert column(rows, "subject") == ["01", "set201", "02"]
    assert "another data set has 01 too" in rows[1]["note"]
    assert len(load_study(study).by_entities) == 3


# --- Labels


NAMES = st.text(alphabet=string.ascii_letters + string.digits + " -_./&éß中", max_size=60)


@given(st.lists(NAMES, max_size=8))
def test_labels_of_sites_are_valid_and_unique_whatever_the_names(names):
    for made in (named_labels(names), hashed_labels(names)):
        lowered = [label.lower() for label in made.values()]
        assert len(set(lowered)) == len(lowered)
        for label in made.values():
            SetupRow.model_validate({"setup": f"{label}-12", "site": label})


@given(st.lists(st.tuples(NAMES, NAMES, NAMES), max_size=8), st.booleans())
def test_proposed_setups_are_valid_and_unique_whatever_the_names(told, keep):
    look = Look(
        [
            FoundImage(Path(f"/data/{n}.nii"), 1, False, f"s{n}", site=site.strip(), institution=place, scanner=model)
            for n, (site, place, model) in enumerate(told)
        ]
    )
    proposal = propose(look, study_dir=Path("/data/study"), keep_names=keep)
    labels = [row["setup"].lower() for row in proposal.setups]
    assert len(set(labels)) == len(labels)
    for row in proposal.setups:
        SetupRow.model_validate({name: value or "x" for name, value in row.items() if name in ("setup", "site")})
    assert {row["setup"] for row in proposal.scans} <= {"", *(row["setup"] for row in proposal.setups)}


def test_labels_do_not_depend_on_the_order_of_names():
    names = ["Mill A", "mill-a", "Quay", "7", "中"]
    assert named_labels(names) == named_labels(reversed(names))
    assert hashed_labels(names) == hashed_labels(reversed(names))


def test_a_name_in_other_letters_becomes_a_hashed_label():
    assert site_label("中") == next(iter(hashed_labels(["中"]).values()))
