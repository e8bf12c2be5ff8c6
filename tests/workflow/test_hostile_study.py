"""A study whose every free text is made to hurt: nothing of it runs in a page, a spreadsheet, a shell or a terminal."""

import csv
import re
import subprocess
import sys
from html.parser import HTMLParser

import pytest

import small_study as small

pytestmark = pytest.mark.slow

MARK = "PLNTD"
TITLE = f"<script>{MARK}()</script> & \"quoted' {{{{ 7 * 7 }}}} {{% raw %}}"
SCANNERS = {
    "quay-1": f'"><img src=x onerror={MARK}()>',
    "mill-1": f'=HYPERLINK("http://invented.example/","{MARK}")',
    "moor-1": f"\u202e＝1+1 {MARK}",
}
RECONSTRUCTION = f"@SUM(A1) </td></table><iframe src=javascript:{MARK}()>"
NOTE = f"+cmd|' /C calc'!A0 <svg onload={MARK}()>"
REASON = f"=1+1 <b id={MARK}> </script><script>{MARK}()</script>"
DECIDER = f"-1+cmd|{MARK} `touch executed`"
IMAGE = f"images/$(touch executed);'<b onclick={MARK}()>\".nii.gz"
APPROVAL = f"</style><style>@import url(http://invented.example/{MARK})</style>"


@pytest.fixture(scope="module")
def finished(tmp_path_factory):
    """The hostile study after a run by start.py, and what the run said."""
    study_dir = small.make_study(tmp_path_factory.mktemp("hostile") / "study")
    config = study_dir / "config"
    quoted = {name: "'" + text.replace("'", "''") + "'" for name, text in (("title", TITLE), ("reason", APPROVAL))}
    settings = small.SETTINGS.replace("Small invented study", quoted["title"]).replace("agreed", quoted["reason"])
    (config / "study.yaml").write_text(settings.replace("invented board", f"'{MARK} =1+1'"))
    setups = [[setup, setup.split("-")[0], SCANNERS[setup], RECONSTRUCTION] for setup in small.WIDTHS]
    (config / "setups.tsv").write_text(as_table(["setup", "site", "scanner", "reconstruction"], setups))
    image = study_dir / IMAGE
    image.parent.mkdir(parents=True, exist_ok=True)
    (study_dir / "images/q02.nii.gz").rename(image)
    rows = [[*row, "", "", "", NOTE] for row in small.scan_rows()]
    rows[1][4] = IMAGE
    rows[3][5:8] = ["no", REASON, DECIDER]
    columns = [*small.SCAN_COLUMNS.split(), "use", "use_reason", "decided_by", "=note <i>"]
    (config / "scans.tsv").write_text(as_table(columns, rows))
    regions = [["middle", "55;55;50", "30", NOTE], ["edge", "30;55;50", "20", NOTE]]
    (config / "regions.tsv").write_text(as_table(["region", "centre_mm", "diameter_mm", "note"], regions))
    return study_dir, start(study_dir)


def as_table(columns, rows):
    """A table as spreadsheets write it: cells with quotation marks are quoted."""
    lines = [[f'"{cell.replace(chr(34), 2 * chr(34))}"' if '"' in cell else cell for cell in row] for row in rows]
    return "\n".join("\t".join(row) for row in [columns, *lines]) + "\n"


def call(script, *arguments):
    command = [sys.executable, small.PROGRAM / "scripts" / script, *map(str, arguments)]
    done = subprocess.run(command, capture_output=True, text=True, check=False, env=small.environment())
    return done.returncode, done.stdout + done.stderr


def start(study_dir):
    code, said = call("start.py", "run", study_dir, "--cores", "2")
    assert code == 0, said
    return said


class Page(HTMLParser):
    """The elements of a page with their attributes, its text, and its code."""

    def __init__(self, text):
        super().__init__()
        self.elements, self.text, self.code = [], [], []
        self.feed(text)
        self.close()

    def handle_starttag(self, tag, attrs):
        self.elements.append((tag, dict(attrs)))

    def handle_data(self, data):
        (self.code if self.cdata_elem else self.text).append(data)  # script and style hold code


def pages(study_dir):
    return sorted(path for path in (study_dir / "results").rglob("*.html") if "handover" not in path.parts)


def test_no_page_holds_an_element_of_the_studys_texts(finished):
    study_dir, _ = finished
    names = {path.name for path in pages(study_dir)}
    assert names >= {"report.html", "plan.html", "quay.html", "mill.html", "moor.html"}
    for path in pages(study_dir):
        page = Page(path.read_text())
        kinds = [tag for tag, _ in page.elements]
        assert kinds.count("script") == (0 if path.name == "plan.html" else 1), path.name
        assert not {"iframe", "object", "embed", "base", "link"} & set(kinds), path.name
        assert page.code, path.name
        assert not [code for code in page.code if MARK in code or "http" in code], path.name
        for tag, attributes in page.elements:
            assert not [name for name in attributes if name.startswith("on")], (path.name, tag)
            assert attributes.get("id") != MARK, path.name
            for name in ("src", "href", "xlink:href", "action"):
                address = attributes.get(name) or "#"
                # A place in the page, a picture that stands inside, or a file beside it: no scheme leads elsewhere.
                assert re.fullmatch(r"#.*|data:image/png;base64,.*|[\w./-]+", address), (path.name, address[:80])
            assert "url(" not in (attributes.get("style") or ""), path.name


def test_the_texts_are_shown_as_they_stand(finished):
    study_dir, _ = finished
    text = "".join(Page((study_dir / "results/audit/report.html").read_text()).text)
    for written in (TITLE, SCANNERS["quay-1"], REASON, APPROVAL):
        assert written in text
    assert "7 * 7" in "".join(Page((study_dir / "results/plan.html").read_text()).text)


def cells(path):
    comma = path.suffix == ".csv"
    with path.open(newline="", encoding="utf-8") as stream:
        rows = csv.reader(stream) if comma else csv.reader(stream, delimiter="\t", quoting=csv.QUOTE_NONE)
        yield from (cell for row in rows for cell in row)


def test_no_cell_of_any_table_is_a_formula(finished):
    study_dir, _ = finished
    tables = [
        study_dir / "history.tsv",
        *(study_dir / "results").rglob("*.tsv"),
        *(study_dir / "results").rglob("*.csv"),
    ]
    assert {path.name for path in tables} >= {"history.tsv", "sites.csv", "plan.tsv", "covariates.tsv", "images.tsv"}
    for path in tables:
        started = [cell for cell in cells(path) if cell.strip().startswith(tuple("=+-@＝＋－＠"))]
        assert [cell for cell in started if not re.fullmatch(r"[+-]?[0-9.]+(e[+-]?\d+)?", cell)] == [], path.name
    assert any(cell == f"'{SCANNERS['mill-1']}" for cell in cells(study_dir / "results/audit/sites.tsv"))
    assert any(cell.startswith("'=1+1 <b") for cell in cells(study_dir / "history.tsv"))


def test_nothing_was_executed_and_the_terminal_is_left_alone(finished):
    study_dir, said = finished
    places = (study_dir, study_dir.parent, study_dir / "images", small.PROGRAM)
    assert not [place for place in places if (place / "executed").exists()]
    assert all(line.isprintable() for line in said.splitlines())
    assert "Traceback" not in said
    # A quotation mark at the start of a cell swallows no row.
    assert "Periods: 3 pass.\nScans: 4 accepted, 1 held" in said


def test_the_bag_checks_out_and_a_second_run_has_nothing_to_do(finished):
    study_dir, _ = finished
    code, said = call("check_handover.py", study_dir / "results/handover", "--study", study_dir)
    assert code == 0, said
    assert "Nothing to do" in start(study_dir)


def test_what_an_altered_history_tells_is_printable(finished):
    study_dir, _ = finished
    path, setups = study_dir / "history.tsv", study_dir / "config/setups.tsv"
    whole, rows = path.read_text(), setups.read_text()
    path.write_text(whole.replace(f"{MARK}()>", "\x1b]0;owned\x07\x1b[2J", 3))
    setups.write_text(rows.replace(MARK, "other"))
    try:
        code, said = call("explain_run.py", study_dir)
    finally:
        path.write_text(whole)
        setups.write_text(rows)
    assert code == 0, said
    assert "owned" in said
    assert all(line.isprintable() for line in said.splitlines())
