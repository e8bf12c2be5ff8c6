"""Damaged inputs: whatever comes, the outcome is a held row, one clear line, or a sound use; never an exception.

`tests/benchmarks/fuzz_inputs.py` does the same with thousands, under limits of memory and time.
"""

import json

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

import fuzzing
from evenblur.images.harmonise import harmonise_scan
from evenblur.images.sidecars import INHERITED_FIELDS
from evenblur.intake import take_in_image
from evenblur.study.problems import StudyError
from evenblur.study.reading import load_study
from hostile_images import nifti1, with_sidecar

# nibabel leaves some of the files open that it fails to read.
pytestmark = [
    pytest.mark.filterwarnings("ignore::ResourceWarning"),
    pytest.mark.filterwarnings("ignore::pytest.PytestUnraisableExceptionWarning"),
]

KINDS = len(fuzzing.IMAGES) + len(fuzzing.TEXTS)


@pytest.fixture(autouse=True)
def quiet():
    fuzzing.quiet_nibabel()


@pytest.mark.parametrize("start", range(0, 24 * KINDS, 4 * KINDS))
def test_damaged_inputs_come_to_a_sound_end(tmp_path, start):
    outcomes = []
    for number in range(start, start + 4 * KINDS):
        (tmp_path / str(number)).mkdir()
        outcomes.append(fuzzing.damaged(number, tmp_path / str(number)))
    assert [outcome for outcome in outcomes if outcome.wrong] == []
    assert {"held row", "clear error"} <= {outcome.outcome for outcome in outcomes}  # the damage reaches what is read


@pytest.mark.parametrize("kind", [made.__name__ for made in fuzzing.IMAGES])
def test_the_inputs_are_sound_before_they_are_damaged(tmp_path, kind):
    name, files, voxels = fuzzing.sound_files(kind)
    for file, data in files.items():
        (tmp_path / file).parent.mkdir(exist_ok=True)
        (tmp_path / file).write_bytes(data)
    record = take_in_image(tmp_path / name, name=name, item="scan", key="k")
    assert (record["holds"], record["voxels_sha256"]) == ([], voxels)


@given(st.text(max_size=60) | st.text("{}[]:,&*!#|>-'\"? \n\tab1.", max_size=60))
def test_any_text_as_yaml_is_read_or_refused_in_one_line(text):
    assert fuzzing.parse(text).count("\n") == 0


CELLS = st.text(max_size=20) | st.sampled_from(
    ["quay-1", "2026-01-01", "no", "yes", "=1+1", "1e400", "9999-12-31", "'"]
)


@given(st.lists(st.lists(CELLS, max_size=6), max_size=6), st.sampled_from(sorted(fuzzing.TABLES)))
def test_any_cells_in_a_table_are_read_or_refused_line_by_line(tmp_path_factory, rows, table):
    study_dir = tmp_path_factory.mktemp("study")
    (study_dir / "config").mkdir()
    for name, text in {"study.yaml": fuzzing.STUDY_YAML, **fuzzing.TABLES}.items():
        more = "".join("\t".join(row) + "\n" for row in rows) if name == table else ""
        (study_dir / "config" / name).write_bytes((text + more).encode("utf-8", "surrogatepass"))
    found = []
    try:
        load_study(study_dir)
    except StudyError as error:
        found = [len(error.problems), *str(error).splitlines()]
    assert not found or found[0] == len(found) - 1


VALUES = st.recursive(
    st.none() | st.booleans() | st.integers() | st.floats() | st.text(max_size=8),
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.text(max_size=4), inner, max_size=3),
    max_leaves=6,
)


@given(st.dictionaries(st.sampled_from(INHERITED_FIELDS), VALUES, max_size=4) | VALUES)
def test_any_sidecar_leaves_a_record_that_can_be_written(tmp_path_factory, content):
    folder = tmp_path_factory.mktemp("scan")
    image = with_sidecar(folder, json.dumps(content).encode())
    assert take_in_image(image, name="a.nii", item="scan", key="k")["holds"] == []
    harmonise_scan(image, in_plane_mm=5, axial_mm=5, out=folder / "h.nii", record=folder / "h.json")
    json.loads((folder / "h.json").read_text(encoding="utf-8"), parse_constant=pytest.fail)


@given(st.lists(st.tuples(st.integers(0, 351), st.integers(0, 255)), min_size=1, max_size=5))
def test_any_bytes_in_a_header_give_a_record(tmp_path_factory, changes):
    image = tmp_path_factory.mktemp("scan") / "a.nii"
    data = nifti1((8, 8, 8)) + np.arange(512, dtype=np.uint8).tobytes()
    for place, value in changes:
        data[place] = value
    image.write_bytes(data)
    with np.errstate(all="ignore"):
        record = take_in_image(image, name="a.nii", item="scan", key="k")
    json.dumps(record, allow_nan=False)
    assert len(record["holds"]) == len(record["problems"])
