"""A study's files are checked as a whole, and every problem says where it is and how to mend it."""

import pytest

from evenblur.study.problems import StudyError, nearest
from evenblur.study.reading import load_study
from evenblur.study.settings import Settings
from evenblur.study.yaml_reading import parse_yaml

SETUPS = "setup\tsite\tscanner\nquay-1\tquay\tinvented\nmill-1\tmill\tinvented\n"
PHANTOMS = (
    "phantom\tsetup\tphantom_session\tacquired\tkind\timage\tdetails\n"
    "q-cyl\tquay-1\tp1\t2026-01-10\tuniform_cylinder\timages/q.nii\t{radius_mm: 100}\n"
)
SCANS = "subject\tsession\tsetup\tacquired\timage\nq01\tbase\tquay-1\t2026-02-01\timages/q01.nii\n"


@pytest.fixture
def study_dir(tmp_path):
    config = tmp_path / "config"
    config.mkdir()
    (config / "study.yaml").write_text("study: {title: Invented study}\n")
    (config / "setups.tsv").write_text(SETUPS)
    (config / "phantoms.tsv").write_text(PHANTOMS)
    (config / "scans.tsv").write_text(SCANS)
    return tmp_path


def problems_of(study_dir):
    with pytest.raises(StudyError) as caught:
        load_study(study_dir)
    return [str(problem) for problem in caught.value.problems]


def write(study_dir, name, text):
    (study_dir / "config" / name).write_bytes(text.encode("utf-8"))


def test_a_sound_study_is_read_with_its_defaults(study_dir):
    study = load_study(study_dir)
    assert study.settings.phantoms.valid_days == 365
    assert study.by_phantom["q-cyl"].details == {"radius_mm": 100.0}
    assert study.scans[0].entities == "sub-q01_ses-base"


def test_windows_line_ends_and_byte_order_mark_change_nothing(study_dir):
    plain = load_study(study_dir)
    write(study_dir, "setups.tsv", "\ufeff" + SETUPS.replace("\n", "\r\n"))
    assert load_study(study_dir) == plain


def test_all_problems_of_all_files_are_listed_at_once(study_dir):
    write(study_dir, "setups.tsv", SETUPS + "Quay-1\tquay\tinvented\n")
    write(study_dir, "phantoms.tsv", PHANTOMS.replace("uniform_cylinder", "uniform_cylindre"))
    write(study_dir, "scans.tsv", SCANS.replace("quay-1", "qay-1").replace("2026-02-01", "01.02.2026"))
    found = problems_of(study_dir)
    assert any("setups.tsv, row 4, setup: `Quay-1` stands in row 2 already" in line for line in found)
    assert any("phantoms.tsv, row 2, kind" in line and "did you mean `uniform_cylinder`?" in line for line in found)
    assert any("scans.tsv, row 2, acquired" in line and "year-month-day" in line for line in found)


def test_an_unknown_setup_names_the_nearest_one(study_dir):
    write(study_dir, "scans.tsv", SCANS.replace("quay-1", "qay-1"))
    assert problems_of(study_dir) == [
        "config/scans.tsv, row 2, setup: found `qay-1`, which config/setups.tsv does not list; did you mean `quay-1`?"
    ]


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        (
            "tolerence: {achieved_mm: 0.3}",
            "config/study.yaml, tolerence: the key is unknown; did you mean `tolerance`?",
        ),
        ("target: {isotropc: true}", "target.isotropc: the key is unknown; did you mean `isotropic`?"),
        ("phantoms: {valid_days: many}", "phantoms.valid_days: found `many`"),
        ("target: {choose: fixed}", "a fixed target needs in_plane_mm and axial_mm"),
        ("target: {choose: fixed, in_plane_mm: 8, axial_mm: 8}", "a fixed target needs an approval"),
        ("target: {in_plane_mm: 8}", "for `choose: fixed` only"),
        ("target: {allowance_se: .nan}", "target.allowance_se: found `nan`"),
        ("results: ../elsewhere", "a folder inside the study folder"),
        ("results: /tmp/elsewhere", "relative to the study folder"),
    ],
)
def test_a_wrong_setting_is_named_with_its_mend(study_dir, text, expected):
    write(study_dir, "study.yaml", f"study: {{title: Invented study}}\n{text}\n")
    assert any(expected in line for line in problems_of(study_dir))


def test_a_missing_title_is_the_only_thing_without_a_default(study_dir):
    write(study_dir, "study.yaml", "modality: pet\n")
    assert problems_of(study_dir) == ["config/study.yaml, study: the key is missing; add it"]
    needed = [name for name, known in Settings.model_fields.items() if known.is_required()]
    assert needed == ["study"]


def test_a_missing_table_is_one_problem(study_dir):
    (study_dir / "config" / "scans.tsv").unlink()
    assert problems_of(study_dir) == [
        "config/scans.tsv: the file is missing; add it, or correct its path in study.yaml"
    ]


@pytest.mark.parametrize(
    ("old", "new", "expected"),
    [
        ("p1", "declared", "`declared` is reserved"),
        ("q-cyl", "q_cyl", "letters, digits and hyphens only"),
        ("{radius_mm: 100}", "{radius_cm: 10}", "details of uniform_cylinder have no key `radius_cm`"),
        ("{radius_mm: 100}", "{radius_mm: wide}", "details: radius_mm is a number"),
        ("{radius_mm: 100}", "{radius_mm: [100}", "details: line 1: not valid YAML"),
        ("images/q.nii", "/images/q.nii", "relative to the study folder"),
        ("2026-01-10", "2026-02-30", "no such day"),
        ("uniform_cylinder", "hot_spheres", "have no key `radius_mm`"),
    ],
)
def test_a_wrong_phantom_row_is_named_with_its_mend(study_dir, old, new, expected):
    write(study_dir, "phantoms.tsv", PHANTOMS.replace(old, new))
    assert any(expected in line for line in problems_of(study_dir))


def test_an_exclusion_needs_a_reason(study_dir):
    write(study_dir, "scans.tsv", SCANS.replace("\n", "\tuse\n", 1).replace("q01.nii\n", "q01.nii\tno\n"))
    assert any("`use: no` needs a use_reason" in line for line in problems_of(study_dir))


def test_a_misspelled_column_is_not_taken_for_a_note(study_dir):
    write(study_dir, "scans.tsv", SCANS.replace("acquired", "aquired"))
    assert any("rename `aquired`" in line for line in problems_of(study_dir))


def test_further_columns_are_kept_as_notes(study_dir):
    write(study_dir, "scans.tsv", SCANS.replace("image\n", "image\tweather\n").replace("q01.nii", "q01.nii\tfair"))
    assert load_study(study_dir).scans[0].notes == {"weather": "fair"}


def test_two_scans_need_different_keys(study_dir):
    write(study_dir, "scans.tsv", SCANS + "Q01\tbase\tquay-1\t2026-02-02\timages/other.nii\n")
    assert any("stands in row 2 already; tell them apart by `run`" in line for line in problems_of(study_dir))


def test_yaml_keeps_on_and_no_as_words_and_refuses_what_grows():
    assert parse_yaml("{on: 1, use: no}") == {"on": 1, "use": "no"}
    for text in ("a: &x [1]\nb: *x", "a: 1\na: 2", "!!python/object/apply:os.system [ls]", "[" * 5000):
        with pytest.raises(ValueError, match=r"\w"):
            parse_yaml(text)


def test_nearest_names_a_close_one_or_lists_them():
    assert nearest("kernal", ["kernel", "target"]) == "did you mean `kernel`?"
    assert nearest("zzz", ["kernel", "target"]) == "known: kernel, target"
