"""A new study from a BIDS data set: what the tables say, what stays empty, what is never touched or told."""

import json
import subprocess
import sys
from pathlib import Path

import pytest

import new_study
from bids_tree import FIELDS, Bids, begin, column, tables
from evenblur.command import run
from evenblur.errors import InputError
from evenblur.study.problems import StudyError
from evenblur.study.reading import load_study
from evenblur.study.settings import Settings
from evenblur.study.yaml_reading import parse_yaml


@pytest.fixture
def bids(tmp_path):
    return Bids(tmp_path / "a data set")


@pytest.fixture
def study(tmp_path):
    return tmp_path / "my study"


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
