"""Step commands by hand: a good call writes its record, a bad one ends in one line and exit code 2."""

import importlib.util
import json
import os
import subprocess
import sys
from pathlib import Path

import nibabel as nib
import numpy as np
import pytest

from evenblur.command import run

SCRIPTS = Path(__file__).resolve().parents[2] / "scripts"


def call(name, *arguments):
    """Run a step command in this process; gives its exit code."""
    specification = importlib.util.spec_from_file_location(f"step_{name}", SCRIPTS / f"{name}.py")
    module = importlib.util.module_from_spec(specification)
    specification.loader.exec_module(module)
    return run(module.main, [str(argument) for argument in arguments])


def one_line(capsys):
    text = capsys.readouterr().err
    assert text.count("\n") == 1
    assert "Traceback" not in text
    return text


def write_image(path, volume, voxel_mm=(2.0, 2.0, 2.5)):
    kind = (
        np.complex64
        if np.iscomplexobj(volume)
        else volume.dtype
        if volume.dtype == np.float64 and volume.max() == 1e39
        else np.float32
    )
    nib.save(nib.Nifti1Image(volume.astype(kind), np.diag([*voxel_mm, 1.0])), path)
    return path


def points(in_plane_mm, axial_mm, shape=(48, 48, 32), voxel_mm=(2.0, 2.0, 2.5)):
    """Four Gaussian spots in closed form."""
    grid = np.meshgrid(*(np.arange(n) * d for n, d in zip(shape, voxel_mm, strict=True)), indexing="ij")
    sigma = np.array([in_plane_mm, in_plane_mm, axial_mm]) / np.sqrt(8 * np.log(2))
    volume = np.zeros(shape)
    for centre in ((24.3, 25.1, 22.0), (70.2, 24.0, 21.0), (25.0, 71.3, 58.0), (71.0, 70.0, 57.3)):
        squares = [((x - c) / s) ** 2 for x, c, s in zip(grid, centre, sigma, strict=True)]
        volume += 1000 * np.exp(-sum(squares) / 2)
    return volume


# --- take_in_image


def test_intake_records_geometry_range_and_identity(tmp_path):
    volume = np.arange(4 * 5 * 6, dtype=np.float32).reshape(4, 5, 6)
    image = write_image(tmp_path / "a.nii", volume, (2.0, 3.0, 4.0))
    assert call("take_in_image", "--image", image, "--key", "x", "--record", tmp_path / "a.json") == 0
    record = json.loads((tmp_path / "a.json").read_text())
    assert record["shape"] == [4, 5, 6]
    assert record["voxel_mm"] == [2.0, 3.0, 4.0]
    assert (record["minimum"], record["maximum"]) == (0.0, 119.0)
    assert record["total_ml"] == pytest.approx(119 * 120 / 2 * 0.024)
    assert record["holds"] == []


@pytest.mark.parametrize(
    ("content", "code"),
    [
        (np.zeros((4, 4, 4)), "image_zero"),
        (np.full((4, 4, 4), np.nan), "image_not_finite"),
        (np.where(np.arange(64).reshape(4, 4, 4) == 3, np.inf, 1.0), "image_not_finite"),
        (np.ones((4, 4, 4, 2, 3)), "not_a_volume"),
        (np.ones((1, 1, 1)), "not_a_volume"),
        (np.full((4, 4, 4), 1 + 2j), "not_a_volume"),
        (np.full((4, 4, 4), 1e39), "image_not_finite"),
        (b"this is no image", "image_unreadable"),
        (b"", "image_unreadable"),
        (None, "image_missing"),
    ],
)
def test_a_bad_image_is_a_record_with_its_reason(tmp_path, content, code):
    image = tmp_path / "a.nii"
    if isinstance(content, bytes):
        image.write_bytes(content)
    elif content is not None:
        write_image(image, content)
    assert call("take_in_image", "--image", image, "--record", tmp_path / "a.json") == 0
    record = json.loads((tmp_path / "a.json").read_text())
    assert record["holds"] == [code]
    assert len(record["problems"]) == 1


def test_an_image_that_was_harmonised_before_is_held(tmp_path):
    first = write_image(tmp_path / "a.nii.gz", points(6.0, 7.0))
    widths = ["--in-plane-mm", 4.0, "--axial-mm", 4.0]
    out = tmp_path / "sub-a_desc-harmonised_pet.nii.gz"
    record = tmp_path / "sub-a_desc-harmonised_pet.json"
    assert call("smooth_scan", "--image", first, *widths, "--out", out, "--record", record) == 0
    assert call("take_in_image", "--image", out, "--record", tmp_path / "again.json") == 0
    assert json.loads((tmp_path / "again.json").read_text())["holds"] == ["already_harmonised"]
    assert call("take_in_image", "--image", first, "--record", tmp_path / "first.json") == 0
    assert json.loads((tmp_path / "first.json").read_text())["holds"] == []


def test_an_ecat_volume_is_taken_in(tmp_path):
    # The ECAT 7 volume that the nibabel package ships for its own tests.
    image = Path(nib.__file__).parent / "tests" / "data" / "tinypet.v"
    assert call("take_in_image", "--image", image, "--record", tmp_path / "a.json") == 0
    record = json.loads((tmp_path / "a.json").read_text())
    assert (record["holds"], record["shape"], record["frames"]) == ([], [10, 10, 3], 1)


def test_a_truncated_image_is_held(tmp_path):
    image = write_image(tmp_path / "a.nii.gz", np.random.default_rng(1).normal(size=(20, 20, 20)))
    image.write_bytes(image.read_bytes()[:-5000])
    assert call("take_in_image", "--image", image, "--record", tmp_path / "a.json") == 0
    assert json.loads((tmp_path / "a.json").read_text())["holds"] == ["image_unreadable"]


def test_an_image_that_changed_or_vanished_during_the_run_is_left_to_the_next(tmp_path, capsys):
    image = write_image(tmp_path / "a.nii", np.ones((4, 4, 4)))
    planned = ["--image", image, "--record", tmp_path / "a.json", "--expect-sha256", "0" * 64]
    assert call("take_in_image", *planned) == 2
    assert "changed during the run" in one_line(capsys)
    image.unlink()
    assert call("take_in_image", *planned) == 2
    assert "vanished during the run" in one_line(capsys)
    assert not (tmp_path / "a.json").exists()


@pytest.mark.parametrize("harm", ["checksum", "bytes after the end"])
def test_a_file_that_smoothing_could_not_read_to_its_end_is_held_at_intake(tmp_path, harm):
    image = write_image(tmp_path / "a.nii.gz", points(6.0, 7.0))
    data = bytearray(image.read_bytes())
    if harm == "checksum":
        data[-6] ^= 255
    else:
        data += b"more"
    image.write_bytes(data)
    assert call("take_in_image", "--image", image, "--record", tmp_path / "a.json") == 0
    assert json.loads((tmp_path / "a.json").read_text())["holds"] == ["image_unreadable"]


def test_a_header_that_claims_too_much_is_held_before_anything_is_read(tmp_path):
    image = write_image(tmp_path / "a.nii", np.ones((4, 4, 4)))
    data = bytearray(image.read_bytes())
    data[42:48] = np.array([3000, 3000, 3000], "<i2").tobytes()
    image.write_bytes(data)
    assert call("take_in_image", "--image", image, "--record", tmp_path / "a.json") == 0
    assert json.loads((tmp_path / "a.json").read_text())["holds"] == ["too_large"]


@pytest.mark.parametrize(
    ("step", "arguments"),
    [
        ("smooth_scan", ["--image", "a.nii", "--in-plane-mm", "wide"]),
        ("measure_resolution", ["--kind", "point_source"]),
        ("take_in_image", []),
    ],
)
def test_a_wrong_argument_is_one_line(capsys, step, arguments):
    with pytest.raises(SystemExit) as ended:
        call(step, *arguments)
    assert ended.value.code == 2
    one_line(capsys)


# --- measure_resolution


def test_a_point_source_is_measured_with_a_readable_summary(tmp_path, capsys):
    image = write_image(tmp_path / "p.nii.gz", points(6.0, 7.0))
    out = tmp_path / "p.json"
    assert call("measure_resolution", "--kind", "point_source", "--image", image, "--out", out) == 0
    record = json.loads(out.read_text())
    assert record["in_plane"]["fwhm_mm"] == pytest.approx(6.0, abs=0.05)
    assert record["axial"]["fwhm_mm"] == pytest.approx(7.0, abs=0.05)
    said = capsys.readouterr().out
    assert "in-plane  6.00 mm" in said
    assert "axial     7.00 mm" in said


def test_the_axial_direction_comes_from_the_affine(tmp_path):
    turned = np.transpose(points(6.0, 7.0), (2, 0, 1))
    affine = np.zeros((4, 4))
    affine[2, 0], affine[0, 1], affine[1, 2], affine[3, 3] = -2.5, 2.0, -2.0, 1.0
    nib.save(nib.Nifti1Image(turned.astype(np.float32), affine), tmp_path / "p.nii")
    out = tmp_path / "p.json"
    assert call("measure_resolution", "--kind", "point_source", "--image", tmp_path / "p.nii", "--out", out) == 0
    record = json.loads(out.read_text())
    assert record["in_plane"]["fwhm_mm"] == pytest.approx(6.0, abs=0.05)
    assert record["axial"]["fwhm_mm"] == pytest.approx(7.0, abs=0.05)


@pytest.mark.parametrize(
    ("kind", "details", "expected"),
    [
        ("uniform_cylindr", "{}", "no such kind"),
        ("point_source", "{source_diametre_mm: 1}", "no key `source_diametre_mm`"),
        ("point_source", "{source_diameter_mm: wide}", "is a number"),
        ("point_source", "[1, 2]", "YAML keys and values"),
        ("point_source", "{a: [", "not valid YAML"),
        ("uniform_cylinder", "{}", "p.nii"),
    ],
)
def test_a_wrong_call_of_the_measurement_ends_in_one_line(tmp_path, capsys, kind, details, expected):
    image = write_image(tmp_path / "p.nii", points(6.0, 7.0))
    (tmp_path / "d.yaml").write_text(details)
    arguments = ["--kind", kind, "--image", image, "--details", tmp_path / "d.yaml", "--out", tmp_path / "o.json"]
    assert call("measure_resolution", *arguments) == 2
    assert expected in one_line(capsys)
    assert not (tmp_path / "o.json").exists()


@pytest.mark.parametrize("content", [None, b"no image", np.zeros((20, 20, 20)), np.full((20, 20, 20), np.nan)])
@pytest.mark.parametrize("kind", ["point_source", "uniform_cylinder"])
def test_an_image_without_a_phantom_gives_no_width(tmp_path, capsys, kind, content):
    image = tmp_path / "p.nii"
    if isinstance(content, bytes):
        image.write_bytes(content)
    elif content is not None:
        write_image(image, content)
    assert call("measure_resolution", "--kind", kind, "--image", image, "--out", tmp_path / "o.json") == 2
    assert "p.nii" in one_line(capsys)
    arguments = ["--tolerant", "--kind", kind, "--image", image, "--out", tmp_path / "o.json"]
    assert call("measure_resolution", *arguments) == 0
    record = json.loads((tmp_path / "o.json").read_text())
    assert record["in_plane"] is record["axial"] is None
    assert [flag["code"] for flag in record["flags"]] == ["phantom_unusable"]


# --- steps on a study folder


@pytest.mark.parametrize(
    "step", ["make_plan", "summarise_intake", "describe_dataset", "make_audit_tables", "make_report", "record_history"]
)
def test_a_step_on_a_broken_study_says_what_is_wrong(tmp_path, capsys, step):
    assert call(step, "--study-dir", tmp_path) == 2
    assert "config/study.yaml" in one_line(capsys)


@pytest.mark.parametrize("step", ["explain_run", "tidy_study"])
def test_a_command_about_a_broken_study_says_what_is_wrong(tmp_path, capsys, step):
    assert call(step, tmp_path) == 2
    assert "config/study.yaml" in one_line(capsys)


@pytest.mark.parametrize(
    "arguments",
    [("--date", "31.3.2026"), ("--program", "{"), ("--program", "[]"), ("--found", '{"a": "b"}'), ("--found", "[1]")],
)
def test_a_wrong_option_of_the_history_is_named(tmp_path, capsys, arguments):
    write_study(tmp_path)
    assert call("record_history", "--study-dir", tmp_path, *arguments) == 2
    assert arguments[0] in one_line(capsys)
    assert not (tmp_path / "history.tsv").exists()


def test_a_study_without_a_plan_is_explained_and_not_tidied(tmp_path, capsys):
    write_study(tmp_path)
    assert call("explain_run", tmp_path) == 0
    assert "First run" in capsys.readouterr().out
    assert call("tidy_study", tmp_path) == 2
    assert "plan.json" in one_line(capsys)


def write_study(tmp_path):
    (tmp_path / "config").mkdir()
    (tmp_path / "config/study.yaml").write_text("study: {title: Invented}\nmodality: spect\n")
    rows = {
        "setups": "setup\tsite\nq-1\tq\n",
        "phantoms": "phantom\tsetup\tphantom_session\tacquired\tkind\timage\n",
        "scans": "subject\tsession\tsetup\tacquired\timage\ns\tb\tq-1\t2026-01-01\ta.nii\n",
    }
    for name, text in rows.items():
        (tmp_path / "config" / f"{name}.tsv").write_text(text)


def test_the_data_set_is_described_as_a_derivative(tmp_path):
    write_study(tmp_path)
    assert call("describe_dataset", "--study-dir", tmp_path) == 0
    described = json.loads((tmp_path / "results/harmonised/dataset_description.json").read_text())
    assert described["DatasetType"] == "derivative"
    assert described["GeneratedBy"][0]["Name"] == "evenblur"
    assert "spect" in (tmp_path / "results/harmonised/.bidsignore").read_text()


@pytest.mark.parametrize("step", ["smooth_scan", "measure_resolution", "measure_achieved"])
def test_a_step_computes_with_one_thread(step):
    program = (
        f"import sys; sys.path.insert(0, {str(SCRIPTS)!r}); import {step}\n"
        "import numpy, threadpoolctl\n"
        "print({pool['num_threads'] for pool in threadpoolctl.threadpool_info()})"
    )
    several = {**os.environ, **dict.fromkeys(("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS"), "2")}
    said = subprocess.run([sys.executable, "-c", program], env=several, capture_output=True, text=True, check=True)
    assert said.stdout.strip() == "{1}"


def test_a_reference_that_changed_during_the_run_is_left_to_the_next(tmp_path, capsys):
    image = write_image(tmp_path / "p.nii", points(6.0, 7.0))
    reference = write_image(tmp_path / "r.nii", points(3.0, 3.0))
    details = ["--details-text", f"{{reference: {os.path.relpath(reference)}}}", "--tolerant"]
    planned = ["--kind", "reference_image", "--image", image, *details, "--out", tmp_path / "o.json"]
    assert call("measure_resolution", *planned, "--expect-reference-sha256", "0" * 64) == 2
    assert "the reference changed during the run" in one_line(capsys)
    assert not (tmp_path / "o.json").exists()
