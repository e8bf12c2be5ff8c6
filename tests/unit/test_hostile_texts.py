"""Study files made to hurt, and those that other programs damage: one clear line each, with its row and its mend."""

import csv
import io

import pytest

from evenblur.audit.tables import cell, table_text
from evenblur.images.plain_files import check_plain_file
from evenblur.study.ledger import Ledger
from evenblur.study.problems import StudyError
from evenblur.study.reading import LARGEST_FILE, load_study
from evenblur.study.tasks import Tasks
from evenblur.study.yaml_reading import LONGEST_TEXT, parse_yaml
from fuzzing import PROGRAM

FILES = {
    "study.yaml": "study: {title: Invented study}\n",
    "setups.tsv": "setup\tsite\tscanner\nquay-1\tquay\tinvented\n",
    "phantoms.tsv": "phantom\tsetup\tphantom_session\tacquired\tkind\timage\n"
    "q-cyl\tquay-1\tp1\t2026-01-10\tuniform_cylinder\timages/q.nii\n",
    "scans.tsv": "subject\tsession\tsetup\tacquired\timage\nq01\tbase\tquay-1\t2026-02-01\timages/q01.nii\n"
    "q02\tbase\tquay-1\t2026-02-02\timages/q02.nii\n",
}


@pytest.fixture
def study_dir(tmp_path):
    (tmp_path / "config").mkdir()
    for name, text in FILES.items():
        (tmp_path / "config" / name).write_text(text)
    return tmp_path


def change(study_dir, name, old, new):
    path = study_dir / "config" / name
    text = path.read_text()
    assert old in text
    path.write_bytes(text.replace(old, new).encode())


def problems(study_dir):
    with pytest.raises(StudyError) as caught:
        load_study(study_dir)
    return str(caught.value).splitlines()


@pytest.mark.parametrize(
    ("written", "said"),
    [
        ("12/01/2026", "a spreadsheet may have changed it from 2026-01-12 or 2026-12-01"),
        ("31.01.2026", "a spreadsheet may have changed it from 2026-01-31"),
        ("46034", "a spreadsheet may have changed it from 2026-01-12"),  # 46034 days after 1899-12-30
        ("2026-1-12", "year-month-day, as 2026-03-31 (a spreadsheet may have changed it)"),
        ("99/99/2026", "year-month-day"),
        ("00000", "year-month-day"),
        ("2026-02-30", "no such day"),
        ("12,5", "year-month-day"),
    ],
)
def test_a_damaged_date_is_one_line_that_guesses_what_it_was(study_dir, written, said):
    change(study_dir, "scans.tsv", "2026-02-02", written)
    (line,) = problems(study_dir)
    assert line.startswith(f"config/scans.tsv, row 3, acquired: found `{written}`: ")
    assert said in line


def test_a_decimal_comma_is_told(study_dir):
    change(study_dir, "setups.tsv", "scanner\n", "scanner\tdeclared_in_plane_mm\tdeclared_source\n")
    change(study_dir, "setups.tsv", "invented\n", "invented\t5,5\tsheet\n")
    assert "the decimal sign is a point" in problems(study_dir)[0]


def test_other_line_ends_and_marks_change_nothing(study_dir):
    plain = load_study(study_dir)
    for mark, ends in (("\ufeff", "\r\n"), ("\ufeff", "\r"), ("", "\r\n")):
        for name, text in FILES.items():
            (study_dir / "config" / name).write_bytes((mark + text.replace("\n", ends)).encode())
        assert load_study(study_dir) == plain


def test_text_of_another_encoding_is_told(study_dir):
    (study_dir / "config/scans.tsv").write_bytes(FILES["scans.tsv"].encode("utf-16"))
    assert problems(study_dir) == ["config/scans.tsv: the text is not UTF-8; save it as UTF-8"]


def test_an_open_quotation_mark_does_not_swallow_the_rows_after_it(study_dir):
    change(study_dir, "scans.tsv", "image\n", "image\tnote\n")
    change(study_dir, "scans.tsv", "q01.nii\n", 'q01.nii\t"seen twice\n')
    (line,) = problems(study_dir)
    assert "note: the cell holds a tab or line end between quotation marks; take out the quotation mark" in line


@pytest.mark.parametrize("sign", ["\0", "\x1b[2J", "\x7f", "\x85"])
def test_control_characters_are_refused_and_not_shown(study_dir, sign):
    change(study_dir, "setups.tsv", "invented", f"inv{sign}ented")
    (line,) = problems(study_dir)
    assert line == "config/setups.tsv, row 2, scanner: holds control characters; type the cell anew"


def test_what_a_line_quotes_is_short_and_printable(study_dir):
    change(study_dir, "scans.tsv", "2026-02-02", "\u202e" + "9" * 100_000)
    (line,) = problems(study_dir)
    assert len(line) < 800
    assert line.isprintable()


@pytest.mark.parametrize(
    ("path", "said"),
    [
        ("/etc/passwd", "relative to the study folder"),
        ("~/a.nii", "relative to the study folder"),
        ("C:\\a.nii", "relative to the study folder"),
        (".", "names no file"),
        ("../..", "names no file"),
        ("-rf", "begins with no hyphen"),
        ("=cmd|' /C calc'!A0", "write ./ before it"),
        ("@SUM(A1)", "write ./ before it"),
        ("a{b}.nii", "no braces"),
    ],
)
def test_a_path_that_leads_astray_is_refused(study_dir, path, said):
    change(study_dir, "scans.tsv", "images/q02.nii", path)
    (line,) = problems(study_dir)
    assert said in line


@pytest.mark.parametrize("results", ["..", "../x", "/tmp/x", "config", "a/../../x", "", ".snakemake", "~", "config/x"])
def test_results_stay_inside_the_study(study_dir, results):
    (study_dir / "config/study.yaml").write_text(f"study: {{title: t}}\nresults: '{results}'\n")
    assert "results" in problems(study_dir)[0]


def test_entities_that_no_file_name_could_hold_are_refused(study_dir):
    change(study_dir, "scans.tsv", "q02\tbase", "q" * 64 + "\t" + "b" * 64)
    load_study(study_dir)
    change(study_dir, "scans.tsv", "image\n", "image\trun\n")
    change(study_dir, "scans.tsv", "q02.nii\n", "q02.nii\t" + "1" * 64 + "\n")
    assert "too long together" in problems(study_dir)[0]


def test_a_row_that_stands_three_times_is_told_each_time(study_dir):
    row = "q01\tbase\tquay-1\t2026-02-01\timages/q01.nii\n"
    (study_dir / "config/scans.tsv").write_text(FILES["scans.tsv"] + row + row)
    assert ["row 4" in line or "row 5" in line for line in problems(study_dir)] == [True, True]


def test_a_file_that_is_too_large_or_no_file_is_not_read(study_dir, tmp_path):
    with (study_dir / "config/scans.tsv").open("r+b") as stream:
        stream.truncate(LARGEST_FILE + 1)
    (study_dir / "config/setups.tsv").unlink()
    (study_dir / "config/setups.tsv").symlink_to("/dev/zero")
    assert [line.split(": ")[1].split(";")[0] for line in problems(study_dir)] == [
        "cannot be read (it is no plain file)",
        "the file is larger than 64 MiB",
    ]


LAUGHS = "a: &a [x, x]\n" + "".join(f"b{k}: &b{k} [*a, *a]\n" for k in range(9))


@pytest.mark.parametrize(
    "text",
    [
        LAUGHS,
        "a: &a {b: *a}",
        "<<: {a: 1}",
        "!!python/object/apply:os.system [touch executed]",
        "!!python/name:os.system",
        "!!python/object/new:type {}",
        "a: !!binary |\n  /w==\n b",
        "[" * 100_000,
        "{a: " * 5000,
        'a: "\\ud800"',
        'a: "\\0"',
        "? [a]\n: b",
        "9" * 5000,
        "a: 2026-99-99",
        "a" * (LONGEST_TEXT + 1),
    ],
    ids=lambda text: text[:20],
)
def test_yaml_that_hurts_is_refused_in_one_line(tmp_path, monkeypatch, text):
    monkeypatch.chdir(tmp_path)
    if text.startswith("<<"):
        assert parse_yaml(text) == {"<<": {"a": 1}}  # a word like any other: nothing is merged
        return
    with pytest.raises(ValueError, match=r"\w") as caught:
        parse_yaml(text)
    assert "\n" not in str(caught.value)
    assert list(tmp_path.iterdir()) == []


# --- what a spreadsheet makes of the tables


@pytest.mark.parametrize("text", ["=1+1", "+cmd", "@SUM(A1)", '=HYPERLINK("http://invented")', "-1+cmd", "=", "+"])
def test_no_cell_is_a_formula(text):
    assert cell(text) == f"'{text}"


@pytest.mark.parametrize("text", ["-0.5", "+3", "1e-5", "-1e-05", "-quay-1", "quay", "", "a=b"])
def test_numbers_and_labels_stay_as_they_are(text):
    assert cell(text) == text


def test_a_table_reads_back_with_as_many_cells(tmp_path):
    rows = [{"a": "x\ty\nz", "b": "\r\n=1"}, {"a": None, "b": 2}]
    read = list(csv.reader(io.StringIO(table_text(["a", "b"], rows)), delimiter="\t"))
    assert read == [["a", "b"], ["x y z", "'=1"], ["", "2"]]


# --- names of files


def test_names_of_other_encodings_in_a_series_stop_nothing(study_dir):
    import os

    folder = study_dir / "images" / "q01.nii"
    folder.mkdir(parents=True)
    (folder / os.fsdecode(b"\xff\xfe")).write_bytes(b"x")
    (folder / "nowhere").symlink_to("/no such place")
    ledger = Ledger(study_dir)
    assert len(ledger.digest("images/q01.nii")) == 64
    ledger.save()


def test_devices_and_pipes_are_no_images(study_dir):
    import os

    (study_dir / "images").mkdir()
    (study_dir / "images/q01.nii").symlink_to("/dev/zero")
    os.mkfifo(study_dir / "images/q02.nii")
    study = load_study(study_dir)
    tasks = Tasks(study, Ledger(study_dir), study_dir, PROGRAM)
    tasks.look_at_images()
    assert [tasks.image(row.image) for row in study.scans] == [[], []]
    with pytest.raises(OSError, match="no plain file"):
        check_plain_file(study_dir / "images/q02.nii")


def test_an_image_that_goes_away_is_no_input_any_more(study_dir):
    (study_dir / "images").mkdir()
    (study_dir / "images/q01.nii").write_bytes(b"x")
    tasks = Tasks(load_study(study_dir), Ledger(study_dir), study_dir, PROGRAM)
    tasks.look_at_images()
    assert tasks.image("images/q01.nii") == ["images/q01.nii"]
    (study_dir / "images/q01.nii").unlink()
    assert tasks.image("images/q01.nii") == []
