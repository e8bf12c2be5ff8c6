"""A new study from a BIDS data set: what the tables say, what stays empty, what is never touched or told."""

import csv
import json
import string
import subprocess
import sys
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

import new_study
from evenblur.command import run
from evenblur.errors import InputError
from evenblur.newstudy.found import FoundImage, Look
from evenblur.newstudy.labels import hashed_labels, named_labels, site_label
from evenblur.newstudy.proposing import propose
from evenblur.study.problems import StudyError
from evenblur.study.reading import load_study
from evenblur.study.rows import SetupRow
from evenblur.study.settings import Settings
from evenblur.study.yaml_reading import parse_yaml

FIELDS = {
    "ManufacturersModelName": "Talvik 3",
    "InstitutionName": "Plantedclinic of Quay",
    "TracerRadionuclide": "F18",
    "ReconMethodName": "ordered subsets",
    "ReconMethodParameterLabels": ["iterations", "subsets"],
    "ReconMethodParameterValues": [4, 8],
    "ReconFilterType": "Gaussian",
    "ReconFilterSize": 5,
}


class Bids:
    """A BIDS data set whose images are empty files: a look through it opens none."""

    def __init__(self, folder):
        self.folder = folder
        folder.mkdir(parents=True)
        self.write("dataset_description.json", json.dumps({"Name": "Invented set", "BIDSVersion": "1.11.1"}))

    def write(self, name, text):
        path = self.folder / name
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_text(text, encoding="utf-8")

    def table(self, name, *rows):
        self.write(name, "".join("\t".join(row.split("|")) + "\n" for row in rows))

    def image(self, subject, session=None, *, entities="", fields=None, day=None, **changed):
        place = f"sub-{subject}" + (f"/ses-{session}" if session else "")
        stem = f"sub-{subject}" + (f"_ses-{session}" if session else "")
        self.write(f"{place}/pet/{stem}{entities}_pet.nii.gz", "")
        self.write(
            f"{place}/pet/{stem}{entities}_pet.json", json.dumps({**(FIELDS if fields is None else fields), **changed})
        )
        if day:
            path = self.folder / place / f"{stem}_scans.tsv"
            known = path.read_text(encoding="utf-8") if path.exists() else "filename\tacq_time\n"
            path.write_text(f"{known}pet/{stem}{entities}_pet.nii.gz\t{day}\n", encoding="utf-8")


@pytest.fixture
def bids(tmp_path):
    return Bids(tmp_path / "a data set")


@pytest.fixture
def study(tmp_path):
    return tmp_path / "my study"


def begin(study, *bids, options=()):
    """Call the command; gives the rows of the three tables."""
    named = [part for one in bids for part in ("--from-bids", str(one.folder))]
    assert run(new_study.main, [str(study), *named, *options]) == 0
    return tables(study)


def tables(study):
    found = {}
    for name in ("setups", "phantoms", "scans"):
        with (study / "config" / f"{name}.tsv").open(encoding="utf-8", newline="") as stream:
            found[name] = list(csv.DictReader(stream, delimiter="\t"))
    return found


def column(rows, name):
    return [row[name] for row in rows]


# --- From nothing


def test_a_study_from_nothing_has_the_default_settings_and_a_comment_on_every_key(study):
    assert begin(study, options=["--title", "Ours: a first try"]) == {"setups": [], "phantoms": [], "scans": []}
    text = (study / "config" / "study.yaml").read_text(encoding="utf-8")
    values = parse_yaml(text)
    assert Settings.model_validate(values) == Settings.model_validate({"study": {"title": "Ours: a first try"}})
    assert set(values) == set(Settings.model_fields)
    lines = text.splitlines()
    keys = [number for number, line in enumerate(lines) if line.strip() and not line.lstrip().startswith("#")]
    bare = [lines[n] for n in keys if not lines[n - 1].lstrip().startswith("#") and not lines[n].endswith(":")]
    assert bare == []


def test_the_studys_own_page_explains_every_column_and_code(study):
    begin(study)
    page = (study / "config" / "README.md").read_text(encoding="utf-8")
    for word in ("`phantom_session`", "`declared_source`", "`tracer`", "`coarser_than_target`", "`saturated`"):
        assert word in page
    assert "demonstration" not in page
    assert "<!--" not in page


def test_the_check_of_a_study_from_nothing_asks_for_rows(study):
    begin(study)
    with pytest.raises(StudyError, match=r"setups\.tsv: the table has no rows"):
        load_study(study)


# --- From BIDS


def test_scans_are_filled_in_from_names_tables_and_sidecars(bids, study):
    bids.table("participants.tsv", "participant_id|site", "sub-q01|Quay")
    bids.image("q01", "base", entities="_trc-invented_run-2", day="2026-02-03T10:30:00")
    rows = begin(study, bids)
    assert rows["scans"] == [
        {
            "subject": "q01",
            "session": "base",
            "setup": "Quay-1",
            "acquired": "2026-02-03",
            "image": "../a data set/sub-q01/ses-base/pet/sub-q01_ses-base_trc-invented_run-2_pet.nii.gz",
            "run": "2",
            "tracer": "invented",
            "radionuclide": "F18",
            "use": "yes",
            "use_reason": "",
            "decided_by": "",
            "note": "",
        }
    ]
    setup = rows["setups"][0]
    assert (setup["setup"], setup["site"], setup["scanner"]) == ("Quay-1", "Quay", "Talvik 3")
    assert setup["reconstruction"] == "ordered subsets, iterations 4, subsets 8, Gaussian filter 5 mm"
    assert "no phantom image was found" in setup["note"]
    study_read = load_study(study)
    assert (study / study_read.scans[0].image).exists()
    assert study_read.settings.study.title == "Invented set"


def test_a_scan_without_a_session_gets_one_and_the_terminal_says_so(bids, study, capsys):
    bids.image("q01", day="2026-02-03")
    assert column(begin(study, bids)["scans"], "session") == ["1"]
    assert "Scans without a session: 1" in capsys.readouterr().out


def test_phantoms_are_known_by_the_standards_example_labels(bids, study):
    # BIDS 1.11: sub-phantom01; a travelling phantom's sessions may be named after the sites.
    bids.table("participants.tsv", "participant_id|site", "sub-q01|QUAY", "sub-m01|mill", "sub-phantom1|n/a")
    bids.image("q01", "base", day="2026-02-03", InstitutionName="")
    bids.image("m01", "base", day="2026-02-04", InstitutionName="", ManufacturersModelName="Ondel 64")
    bids.image("phantom1", "quay", day="2026-01-12", InstitutionName="")
    bids.image("phantom1", "MILL", day="2026-01-13", InstitutionName="", ManufacturersModelName="Ondel 64")
    rows = begin(study, bids)
    assert column(rows["scans"], "subject") == ["m01", "q01"]
    assert {row["phantom"]: row["setup"] for row in rows["phantoms"]} == {
        "phantom1-quay": "QUAY-1",
        "phantom1-MILL": "mill-1",
    }
    assert column(rows["phantoms"], "kind") == ["", ""]
    assert all("kind, details: write what was scanned" in row["note"] for row in rows["phantoms"])


@pytest.mark.parametrize(
    ("told", "kind"),
    [
        ("uniform cylinder", "uniform_cylinder"),
        ("Cylinder with hot spheres", "hot_spheres"),
        ("line source", "line_source"),
        ("point sources", "point_source"),
        ("phantom", ""),
    ],
)
def test_the_kind_of_a_phantom_is_guessed_only_where_the_sidecar_says_so(bids, study, told, kind):
    bids.image("phantom01", day="2026-01-12", BodyPart="phantom", BodyPartDetails=told)
    row = begin(study, bids)["phantoms"][0]
    assert row["kind"] == kind
    assert row["details"] == ""
    assert ("guessed" in row["note"]) == bool(kind)


def test_phantom_images_of_one_setup_and_day_are_one_session(bids, study):
    for label, day in (("phantom1", "2026-06-12"), ("phantom2", "2026-06-12"), ("phantom3", "2026-01-12")):
        bids.image(label, day=day)
    rows = begin(study, bids)["phantoms"]
    assert {row["phantom"]: row["phantom_session"] for row in rows} == {
        "phantom1": "p2",
        "phantom2": "p2",
        "phantom3": "p1",
    }


@pytest.mark.parametrize(
    ("scan", "session", "sidecar", "day"),
    [
        ("2026-02-03T10:30:00.5Z", "2026-01-01", "2026-01-01", "2026-02-03"),
        ("n/a", "2026-02-04T00:00:00", "2026-01-01", "2026-02-04"),
        ("n/a", "n/a", "2026-02-05", "2026-02-05"),
        ("n/a", "n/a", "2026-02-05Z", "2026-02-05"),
        ("1924-12-31T10:30:00", "n/a", "n/a", ""),
        ("1925-01-01T10:30:00", "n/a", "n/a", "1925-01-01"),
        ("2026-02-30", "n/a", "n/a", ""),
        ("February", "n/a", 20260205, "2026-02-05"),
        ("n/a", "n/a", "n/a", ""),
    ],
)
def test_days_come_from_the_nearest_table_and_shifted_ones_stay_empty(bids, study, scan, session, sidecar, day):
    bids.image("q01", "a", day=scan, ScanDate=sidecar)
    bids.table("sub-q01/sub-q01_sessions.tsv", "session_id|acq_time", f"ses-a|{session}")
    row = begin(study, bids)["scans"][0]
    assert row["acquired"] == day
    assert ("acquired:" in row["note"]) == (day == "")
    assert ("shifted" in row["note"]) == scan.startswith("1924")


def test_sidecars_are_inherited_and_the_nearest_wins(bids, study):
    bids.write("pet.json", json.dumps({**FIELDS, "ManufacturersModelName": "Top"}))
    bids.write("sub-b/sub-b_pet.json", json.dumps({"ManufacturersModelName": "Subject"}))
    bids.write("trc-x_pet.json", json.dumps({"ManufacturersModelName": "Tracer"}))
    for subject in ("a", "b", "c"):
        bids.image(subject, entities="_trc-x" if subject == "c" else "", fields={}, day="2026-02-03")
    rows = begin(study, bids)
    scanners = {row["setup"]: row["scanner"] for row in rows["setups"]}
    assert {row["subject"]: scanners[row["setup"]] for row in rows["scans"]} == {
        "a": "Top",
        "b": "Subject",
        "c": "Tracer",
    }


def test_images_without_attenuation_correction_are_left_out_and_counted(bids, study, capsys):
    bids.image("a", entities="_rec-acdyn", day="2026-02-03")
    bids.image("a", entities="_rec-nacdyn")
    bids.image("b", entities="_rec-nacdyn")  # the only image of its subject: kept
    assert column(begin(study, bids)["scans"], "subject") == ["a", "b"]
    assert "Left out: 1 images without attenuation correction" in capsys.readouterr().out


def test_two_reconstructions_of_one_scan_are_for_the_user_to_choose_from(bids, study):
    bids.image("a", entities="_rec-sharp", day="2026-02-03", ReconFilterSize=0)
    bids.image("a", entities="_rec-soft", day="2026-02-03")
    rows = begin(study, bids)
    assert sorted(column(rows["scans"], "setup")) == column(rows["setups"], "setup")
    assert len(rows["setups"]) == 2
    assert all("several images of one scan" in row["note"] for row in rows["scans"])
    with pytest.raises(StudyError, match="tell them apart by `run`"):
        load_study(study)


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


# --- What is never done


def test_nothing_is_ever_overwritten(bids, study):
    bids.image("a", day="2026-02-03")
    begin(study, bids)
    before = {path: path.read_bytes() for path in study.rglob("*") if path.is_file()}
    assert run(new_study.main, [str(study), "--from-bids", str(bids.folder)]) == 2
    assert {path: path.read_bytes() for path in study.rglob("*") if path.is_file()} == before


def test_a_folder_with_other_things_in_it_may_become_a_study(bids, tmp_path):
    bids.image("a", day="2026-02-03")
    inside = begin(bids.folder, bids)["scans"][0]["image"]  # a data set may even be its own study folder
    assert inside == "sub-a/pet/sub-a_pet.nii.gz"
    deeper = bids.folder / "derivatives" / "pooled"
    assert begin(deeper, bids)["scans"][0]["image"] == "../../sub-a/pet/sub-a_pet.nii.gz"
    assert (deeper / "../../sub-a/pet/sub-a_pet.nii.gz").exists()


def test_a_data_set_needs_nothing_but_pythons_own_library(bids, study):
    bids.image("a", day="2026-02-03")
    bare = [getattr(sys, "_base_executable", sys.executable), "-S", "-E", "-s", str(Path(new_study.__file__))]
    done = subprocess.run(
        [*bare, str(study), "--from-bids", str(bids.folder)], capture_output=True, text=True, check=False
    )
    assert (done.returncode, done.stderr) == (0, "")
    assert len(tables(study)["scans"]) == 1


def test_the_data_set_is_not_touched(bids, study):
    bids.image("a", day="2026-02-03")
    before = {path: (path.read_bytes(), path.stat().st_mtime_ns) for path in bids.folder.rglob("*") if path.is_file()}
    begin(study, bids)
    assert {p: (p.read_bytes(), p.stat().st_mtime_ns) for p in bids.folder.rglob("*") if p.is_file()} == before


def test_a_link_to_an_image_that_is_not_there_keeps_its_row(bids, study):
    bids.image("a", day="2026-02-03")
    image = bids.folder / "sub-a/pet/sub-a_pet.nii.gz"
    image.unlink()
    image.symlink_to("../../.git/annex/objects/not-fetched")
    assert column(begin(study, bids)["scans"], "image") == ["../a data set/sub-a/pet/sub-a_pet.nii.gz"]


@pytest.mark.parametrize(
    ("spoil", "says"),
    [
        (lambda b: (b.folder / "dataset_description.json").unlink(), "there is no dataset_description.json"),
        (lambda b: (b.folder / "sub-a/pet/sub-a_pet.nii.gz").unlink(), "holds no PET image"),
        (lambda b: b.table("participants.tsv", "participant|site", "sub-a|quay"), "has no column participant_id"),
        (lambda b: (b.folder / "participants.tsv").write_bytes(b"\xff\xfe\x00p"), "is no text in UTF-8"),
    ],
)
def test_what_is_no_usable_data_set_is_refused_in_one_line_and_nothing_is_written(bids, study, capsys, spoil, says):
    bids.image("a", day="2026-02-03")
    spoil(bids)
    assert run(new_study.main, [str(study), "--from-bids", str(bids.folder)]) == 2
    said = capsys.readouterr().err
    assert says in said
    assert said.count("\n") == 1
    assert not study.exists()


def test_a_failure_while_writing_leaves_nothing_behind(bids, study, monkeypatch):
    bids.image("a", day="2026-02-03")

    def full(self, target):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(Path, "rename", full)
    assert run(new_study.main, [str(study), "--from-bids", str(bids.folder)]) == 2
    assert list(study.iterdir()) == []


@pytest.mark.parametrize("text", ["{", "[1]", '{"ReconMethodParameterValues": {"a": 1}, "InstitutionName": 5}'])
def test_a_sidecar_that_is_none_costs_its_facts_only(bids, study, text):
    bids.image("a", day="2026-02-03")
    bids.write("sub-a/pet/sub-a_pet.json", text)
    assert len(begin(study, bids)["scans"]) == 1


def test_text_of_a_sidecar_cannot_break_the_table(bids, study):
    bids.image("a", day="2026-02-03", ManufacturersModelName='"Tal\tvik\n3\x1b[31m' + "x" * 500)
    row = begin(study, bids)["setups"][0]
    assert row["scanner"].startswith("'Tal vik 3")
    assert len(row["scanner"]) <= 120
    assert row["scanner"].isprintable()
    load_study(study)


def test_the_same_data_set_gives_the_same_bytes(bids, tmp_path):
    for subject in ("b", "a", "phantom1"):
        bids.image(subject, day="2026-02-03")
    begin(tmp_path / "one", bids)
    begin(tmp_path / "two", bids)
    for path in (tmp_path / "one/config").iterdir():
        assert path.read_bytes() == (tmp_path / "two/config" / path.name).read_bytes()


def test_study_folder_must_be_no_file(tmp_path):
    (tmp_path / "file").touch()
    with pytest.raises(InputError, match="is no folder"):
        new_study.main([str(tmp_path / "file")])
