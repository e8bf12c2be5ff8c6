"""A new study from DICOM files: series found in any order, linked, and nobody's name told."""

import csv
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
from pydicom.uid import generate_uid

import dicom_simulation as dicom
import new_study
from evenblur.command import run
from evenblur.images.reading import open_image
from evenblur.images.streaming import iter_frames_float32
from evenblur.intake import take_in_image
from evenblur.study.reading import load_study


def begin(study, folder, *options):
    """Call the command; gives the rows of the three tables."""
    assert run(new_study.main, [str(study), "--from-dicom", str(folder), *options]) == 0
    found = {}
    for name in ("setups", "phantoms", "scans"):
        with (study / "config" / f"{name}.tsv").open(encoding="utf-8", newline="") as stream:
            found[name] = list(csv.DictReader(stream, delimiter="\t"))
    return found


def series(folder, *, seed=3, **fields):
    fields.setdefault("StudyInstanceUID", generate_uid())
    return dicom.write_series(folder, dicom.picture(seed=seed), change=dicom.edit(**fields))


@pytest.fixture
def study(tmp_path):
    return tmp_path / "my study"


@pytest.fixture
def export(tmp_path):
    """Two visits of one patient, one of another and a phantom: a folder a series, with a name in the path."""
    folder = tmp_path / "export of Plantedname"
    day = {"AcquisitionDate": "20260203"}
    series(folder / "b" / "pet", PatientID="PLANTEDNUMBER77", **day)
    series(folder / "a", PatientID="PLANTEDNUMBER77", AcquisitionDate="20260303")
    series(folder / "c", PatientID="PLANTEDNUMBER78", AcquisitionDate="20260204")
    series(folder / "d", PatientID="QC", PatientName="QC^Phantom", AcquisitionDate="20260112")
    (folder / "c" / "deeper").mkdir()
    return folder


def test_subjects_get_labels_of_their_own_and_visits_follow_their_days(export, study):
    rows = begin(study, export)
    told = [(row["subject"], row["session"], row["acquired"]) for row in rows["scans"]]
    assert sorted(told) == [("s001", "1", "2026-02-03"), ("s001", "2", "2026-03-03"), ("s002", "1", "2026-02-04")]
    assert [(row["phantom"], row["kind"]) for row in rows["phantoms"]] == [("phantom001-1", "")]
    assert [(row["scanner"], row["reconstruction"]) for row in rows["setups"]] == [
        ("Invented 3", "OSEM 4i8s, Gauss 4.0")
    ]
    assert {row["setup"] for row in [*rows["scans"], *rows["phantoms"]]} == {rows["setups"][0]["setup"]}


def test_nothing_that_points_to_a_person_or_place_is_copied(export, study, capsys):
    begin(study, export)
    said = capsys.readouterr()
    written = "".join(path.read_text(encoding="utf-8") for path in (study / "config").iterdir())
    dicom.assert_nothing_planted(written + said.out.replace(str(export), "") + said.err)
    links = [path.relative_to(study).as_posix() for path in (study / "images").rglob("*")]
    dicom.assert_nothing_planted("\n".join(links))


def test_the_links_lead_to_the_series_and_name_no_absolute_path(export, study):
    rows = begin(study, export)
    targets = {(study / row["image"]).resolve() for row in rows["scans"]}
    assert targets == {export / "a", export / "b" / "pet", export / "c"}
    assert all(not Path(row["image"]).is_absolute() for row in rows["scans"])
    link = next((study / "images" / "scans").iterdir())
    assert not link.readlink().is_absolute()


def test_series_that_share_a_folder_are_told_apart(tmp_path, study):
    flat = tmp_path / "flat"
    meant = {}
    for number in (1, 2):
        place = tmp_path / f"once{number}"
        meant[number] = series(place, seed=number, PatientID=f"P{number}", AcquisitionDate=f"2026020{number}")
        flat.mkdir(exist_ok=True)
        for path in place.iterdir():
            path.rename(flat / f"{path.name}-{number}")
    rows = begin(study, flat)["scans"]
    assert [row["subject"] for row in rows] == ["s001", "s002"]
    for number, row in enumerate(rows, start=1):
        frame = next(iter(iter_frames_float32(open_image(study / row["image"]))))
        assert np.sort(frame, axis=None) == pytest.approx(np.sort(meant[number], axis=None), rel=1e-6)
        record = take_in_image(study / row["image"], name=row["image"], item="scan", key="x")
        assert record["holds"] == []


def test_the_study_loads_once_the_phantom_is_described(export, study):
    begin(study, export)
    table = study / "config" / "phantoms.tsv"
    lines = [line.split("\t") for line in table.read_text(encoding="utf-8").splitlines()]
    lines[1][4] = "uniform_cylinder"
    table.write_text("".join("\t".join(cells) + "\n" for cells in lines), encoding="utf-8")
    read = load_study(study)
    assert len(read.scans) == 3
    assert all((study / row.image).is_dir() for row in [*read.scans, *read.phantoms])


def test_quality_control_images_are_phantoms(tmp_path, study):
    series(tmp_path / "in", QualityControlImage="YES", AcquisitionDate="20260112")
    rows = begin(study, tmp_path / "in")
    assert (len(rows["phantoms"]), len(rows["scans"])) == (1, 0)


def test_shifted_days_stay_empty_with_a_note(tmp_path, study):
    series(tmp_path / "in", AcquisitionDate="19110203")
    row = begin(study, tmp_path / "in")["scans"][0]
    assert row["acquired"] == ""
    assert "shifted" in row["note"]


def test_other_reconstructions_of_a_visit_are_runs_and_setups_of_their_own(tmp_path, study):
    same = {"StudyInstanceUID": generate_uid(), "PatientID": "P1", "AcquisitionDate": "20260203"}
    series(tmp_path / "in" / "1", **same)
    series(tmp_path / "in" / "2", ConvolutionKernel="Gauss 6.0", **same)
    rows = begin(study, tmp_path / "in")
    assert [(row["subject"], row["session"], row["run"]) for row in rows["scans"]] == [
        ("s001", "1", ""),
        ("s001", "1", "2"),
    ]
    assert len({row["setup"] for row in rows["scans"]}) == 2


def test_series_without_attenuation_correction_are_left_out_and_counted(tmp_path, study, capsys):
    same = {"StudyInstanceUID": generate_uid(), "AcquisitionDate": "20260203"}
    series(tmp_path / "in" / "1", **same)
    series(tmp_path / "in" / "2", CorrectedImage=["DECY", "NORM"], **same)
    alone = series(tmp_path / "in" / "3", CorrectedImage=["DECY", "NORM"], AcquisitionDate="20260204")
    assert alone.size
    rows = begin(study, tmp_path / "in")["scans"]
    assert sorted((study / row["image"]).resolve().name for row in rows) == ["1", "3"]
    assert "Left out: 1 series without attenuation correction" in capsys.readouterr().out


def test_damaged_files_are_counted_and_links_that_lead_back_do_no_harm(tmp_path, study, capsys):
    folder = tmp_path / "in"
    series(folder / "1", AcquisitionDate="20260203")
    (folder / "1" / "back").symlink_to(folder)
    (folder / "2").mkdir()
    whole = next(path for path in (folder / "1").iterdir() if path.is_file()).read_bytes()
    (folder / "2" / "cut within a number").write_bytes(whole[:142])
    (folder / "2" / "cut before the series").write_bytes(whole[:400])
    assert len(begin(study, folder)["scans"]) == 1
    said = capsys.readouterr()
    assert "Left out: 2 DICOM files whose header cannot be read" in said.out
    assert said.err == ""


def test_without_its_packages_the_command_says_which_call_has_them(tmp_path):
    series(tmp_path / "in", AcquisitionDate="20260203")
    # A Python that sees nothing but the standard library.
    bare = [getattr(sys, "_base_executable", sys.executable), "-S", "-E", "-s", str(Path(new_study.__file__))]
    done = subprocess.run(
        [*bare, str(tmp_path / "study"), "--from-dicom", str(tmp_path / "in")],
        capture_output=True,
        text=True,
        check=False,
    )
    assert done.returncode == 2
    assert "start.py new STUDY --from-dicom DIR" in done.stderr
    assert done.stderr.count("\n") == 1


def test_files_of_other_kinds_are_passed_over(tmp_path, study):
    folder = tmp_path / "in"
    series(folder / "1", AcquisitionDate="20260203")
    series(folder / "ct", SOPClassUID="1.2.840.10008.5.1.4.1.1.2", Modality="CT")
    (folder / "1" / "notes.txt").write_text("no DICOM\n")
    (folder / "DICOMDIR").write_bytes(b"index")
    row = begin(study, folder)["scans"][0]
    assert take_in_image(study / row["image"], name="x", item="scan", key="x")["holds"] == []


def test_a_reconstructed_tomogram_makes_a_spect_study(tmp_path, study):
    dicom.write_tomogram(tmp_path / "in", dicom.picture())
    begin(study, tmp_path / "in")
    assert "\nmodality: spect\n" in (study / "config" / "study.yaml").read_text(encoding="utf-8")


def test_pet_and_spect_together_are_refused(tmp_path, study, capsys):
    dicom.write_tomogram(tmp_path / "in" / "1", dicom.picture())
    series(tmp_path / "in" / "2")
    assert run(new_study.main, [str(study), "--from-dicom", str(tmp_path / "in")]) == 2
    assert "make a study of each" in capsys.readouterr().err
    assert not study.exists()


def test_a_folder_without_series_is_refused(tmp_path, study, capsys):
    (tmp_path / "in").mkdir()
    assert run(new_study.main, [str(study), "--from-dicom", str(tmp_path / "in")]) == 2
    assert "holds no PET" in capsys.readouterr().err


def test_institutions_keep_their_names_only_where_asked(tmp_path):
    series(tmp_path / "in", AcquisitionDate="20260203")
    assert begin(tmp_path / "one", tmp_path / "in")["setups"][0]["site"].startswith("site-")
    assert begin(tmp_path / "two", tmp_path / "in", "--keep-names")["setups"][0]["site"] == "Plantedclinic"


def test_no_file_of_the_export_is_touched(export, study):
    before = {path: (path.read_bytes(), path.stat().st_mtime_ns) for path in export.rglob("*") if path.is_file()}
    begin(study, export)
    assert {
        path: (path.read_bytes(), path.stat().st_mtime_ns) for path in export.rglob("*") if path.is_file()
    } == before
