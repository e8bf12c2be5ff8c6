"""The report: self-contained, escaped, the same bytes twice, readable with a keyboard and a screen reader."""

import base64
import hashlib
import itertools
import json
import re
import subprocess
import sys
from dataclasses import replace
from html.parser import HTMLParser
from math import sqrt
from pathlib import Path

import pytest
from scipy import stats

from audit_example import PERIODS, VERDICTS, example_audit, settings
from evenblur.audit.facts import audit_record
from evenblur.audit.intervals import half_interval
from evenblur.audit.report import render_report
from evenblur.audit.sentences import MEANINGS, SYMBOLS, target_sentences
from evenblur.audit.verdicts import PRECEDENCE

PROGRAM = Path(__file__).resolve().parents[2]
SCRIPTS = PROGRAM / "scripts"
TEMPLATES = PROGRAM / "workflow" / "report"
VOID = {"meta", "br", "link", "img", "hr", "input", "wbr"}


class Page(HTMLParser):
    """Tags with their attributes, text by tag, and whether the tags nest."""

    def __init__(self, text):
        super().__init__(convert_charrefs=True)
        self.tags, self.texts, self.open, self.wrong = [], [], [], []
        self.feed(text)
        self.close()

    def handle_starttag(self, tag, attrs):
        self.tags.append((tag, dict(attrs)))
        if tag not in VOID:
            self.open.append(tag)

    def handle_startendtag(self, tag, attrs):
        self.tags.append((tag, dict(attrs)))

    def handle_endtag(self, tag):
        if not self.open or self.open.pop() != tag:
            self.wrong.append(tag)

    def handle_data(self, data):
        self.texts.append((self.open[-1] if self.open else "", data))

    def named(self, tag):
        return [attributes for found, attributes in self.tags if found == tag]

    @property
    def visible(self):
        return " ".join(" ".join(data for tag, data in self.texts if tag not in ("style", "script")).split())


def page_of(audit):
    return render_report(audit_record(audit), audit=audit, templates=TEMPLATES)


@pytest.fixture(scope="module")
def html():
    return page_of(example_audit())


@pytest.fixture(scope="module")
def page(html):
    return Page(html)


def test_the_tags_nest(page):
    assert page.wrong == []
    assert page.open == []


def test_nothing_comes_from_elsewhere(html, page):
    for tag, attributes in page.tags:
        for name in ("src", "href", "xlink:href", "action", "data", "poster", "srcset"):
            where = attributes.get(name) or "#"
            assert where.startswith("#") or re.fullmatch(r"sites/site[A-G]\.html", where), (tag, name)
        assert tag not in ("link", "iframe", "object", "embed")
    assert "http:" not in html
    assert "https:" not in html
    assert "@import" not in html
    assert not re.search(r"url\((?!#)", html)


def test_the_policy_lets_the_pages_own_script_run_and_nothing_else(html):
    (script,) = re.findall(r"<script>(.*?)</script>", html, flags=re.DOTALL)
    policy = re.search(r'http-equiv="Content-Security-Policy" content="([^"]*)"', html).group(1)
    digest = base64.b64encode(hashlib.sha256(script.encode()).digest()).decode()
    rules = dict(rule.strip().split(" ", 1) for rule in policy.replace("&#39;", "'").split(";"))
    assert rules == {
        "default-src": "'none'",
        "img-src": "data:",
        "style-src": "'unsafe-inline'",
        "script-src": f"'sha256-{digest}'",
        "base-uri": "'none'",
        "form-action": "'none'",
    }


def test_the_same_records_give_the_same_bytes(html):
    assert page_of(example_audit()) == html


def test_a_users_matplotlib_settings_do_not_change_the_page(html):
    import matplotlib as mpl

    with mpl.rc_context({"font.size": 20, "lines.linewidth": 9, "axes.facecolor": "red"}):
        assert page_of(example_audit()) == html


def test_no_path_of_this_computer_and_no_time_of_day(html, page):
    assert str(PROGRAM) not in html
    assert not re.search(r"\d\d:\d\d:\d\d", html)
    assert "<metadata" not in html


def test_the_verdict_comes_first(page):
    first = next(data for tag, data in page.texts if "periods pass" in data)
    accepted = sum(scan["status"] == "accepted" for scan in example_audit().plan["scans"])
    held = sum(scan["status"] == "held" for scan in example_audit().plan["scans"])
    wanted = f"2 of 7 periods pass; {accepted} scans are accepted, {held} are held; the harmonised data set is clean."
    assert first == wanted


def test_every_period_shows_its_verdict_as_a_word_and_a_sign(html):
    for setup, word in VERDICTS.items():
        session = "declared" if setup == "E" else "s1"
        row = re.search(
            rf'<th scope="rowgroup"[^>]*><a[^>]*>{setup} · {session}<.*?</tbody>', html, flags=re.DOTALL
        ).group()
        mark = re.search(r'<span class="mark[^>]*><span aria-hidden="true">(.)</span> (\w+)</span>', row)
        assert mark.groups() == (SYMBOLS[word], word)
    assert set(SYMBOLS) == set(MEANINGS) == set(PRECEDENCE)
    assert len(set(SYMBOLS.values())) == len(SYMBOLS)


def test_the_cautions_are_there(page):
    for words in (
        "Resolution is harmonised, activity scale is not.",
        "For research. Not for reading patients’ images",
        "Local rules and licensed staff come first",
        "It does not prove the site’s width",
    ):
        assert words in page.visible


def test_held_scans_and_queries_are_all_there(page):
    record = audit_record(example_audit())
    for scan in example_audit().plan["scans"]:
        assert scan["entities"].replace("_", "_ ") in page.visible or scan["entities"] in page.visible
    assert record.queries
    for row in record.queries:
        assert row.sentence in page.visible


def test_every_exclusion_has_reason_and_name(page):
    assert "Bubble in the fill" in page.visible
    assert "QA" in page.visible


HOSTILE = "<script>alert(1)</script>\"'&$x$"


def test_text_from_the_study_is_escaped_everywhere():
    audit = example_audit()
    plan = {
        **audit.plan,
        "periods": [
            {**entry, "setup": HOSTILE if entry["setup"] == "A" else entry["setup"]} for entry in audit.plan["periods"]
        ],
        "scans": [{**scan, "note": HOSTILE, "setup": HOSTILE} for scan in audit.plan["scans"]],
        "target": {**audit.plan["target"], "decided_by": HOSTILE, "reason": HOSTILE},
    }
    hostile = replace(
        audit,
        settings={**settings(), "study": {"title": HOSTILE}},
        setups=tuple({**row, "site": HOSTILE, "scanner": HOSTILE} for row in audit.setups),
        phantoms=tuple({**row, "use_reason": HOSTILE, "decided_by": HOSTILE} for row in audit.phantoms),
        plan=plan,
        achieved={(HOSTILE, "s1"): audit.achieved["A", "s1"], **audit.achieved},
        harmonised_files=(*audit.harmonised_files, f"results/harmonised/{HOSTILE}"),
    )
    text = page_of(hostile)
    page = Page(text)
    assert len(page.named("script")) == text.count("<script") == 1
    assert page.wrong == []
    assert page.visible.count(HOSTILE) > 10
    start = text.index('id="widths-title"')
    figure = text[start : text.index("</svg>", start)]
    assert "alert(1)" in figure  # the figure's labels hold it too, as text


def test_a_stray_file_makes_the_data_set_not_clean():
    audit = example_audit()
    stray = "results/harmonised/sub-zz/left_over.nii.gz"
    page = Page(page_of(replace(audit, harmonised_files=(*audit.harmonised_files, stray))))
    assert "the harmonised data set is not clean." in page.visible
    assert stray in page.visible


def test_tables_and_figures_speak_to_a_screen_reader(page):
    tables = page.named("table")
    assert len(page.named("caption")) == len(tables) >= 5
    assert all(cell.get("scope") in ("col", "row", "rowgroup") for cell in page.named("th"))
    assert page.named("html")[0]["lang"] == "en"
    ids = [attributes["id"] for _, attributes in page.tags if "id" in attributes]
    assert len(ids) == len(set(ids))
    figures = [figure for figure in page.named("svg") if figure.get("aria-hidden") != "true"]
    # Widths; three kinds' profiles before and after; transfer, time and recovery in two panels each; four periods.
    assert len(figures) == 1 + 3 * 2 + 3 * 2 + 4
    for figure in figures:
        assert figure["role"] == "img"
        assert {figure["aria-labelledby"], figure["aria-describedby"]} <= set(ids)


def test_links_and_references_inside_the_page_lead_somewhere(page):
    ids = {attributes["id"] for _, attributes in page.tags if "id" in attributes}
    for _, attributes in page.tags:
        for name in ("href", "aria-labelledby"):
            inside = (attributes.get(name) or "").split()
            for target in [one for one in inside if not one.startswith("sites/")]:
                assert target.removeprefix("#") in ids, target


def test_headings_never_skip_a_level(page):
    levels = [int(tag[1]) for tag, _ in page.tags if re.fullmatch(r"h[1-6]", tag)]
    assert levels[0] == 1
    assert levels.count(1) == 1
    assert all(after - before <= 1 for before, after in itertools.pairwise(levels))


def test_figures_take_the_pages_colours(html):
    figure = html[html.index("<svg") : html.rindex("</svg>")]
    for name in ("--ink", "--measured", "--achieved", "--target", "--line"):
        assert f"var({name})" in figure
    assert not re.search(r"#0[1-7]0[2-8]0[3-9]", figure)
    style = html[html.index("<style>") : html.index("</style>")]
    assert "prefers-color-scheme: dark" in style
    assert "@media print" in style


def test_half_an_interval_uses_student_t_for_the_measurement_alone():
    found = half_interval(0.1, total_se_mm=sqrt(0.1**2 + 0.2**2), degrees=11.0, repeatability_mm=0.2)
    wanted = sqrt((stats.t.ppf(0.975, 11) * 0.1) ** 2 + (stats.norm.ppf(0.975) * 0.2) ** 2)
    assert found == pytest.approx(wanted, rel=1e-6)  # the normal point is kept to seven digits
    assert half_interval(None, total_se_mm=None, degrees=None, repeatability_mm=0.2) is None


def test_a_fixed_target_names_who_fixed_it_and_why():
    audit = example_audit()
    target = {
        "in_plane_mm": 7.0,
        "axial_mm": 6.5,
        "choose": "fixed",
        "decided_by": "the physics group",
        "on": "2025-05-01",
        "reason": "frozen before the second wave",
    }
    text = " ".join(target_sentences(replace(audit, plan={**audit.plan, "target": target})))
    assert "in-plane 7 mm and axial 6.5 mm" in text
    assert "fixed by the physics group on 2025-05-01: frozen before the second wave." in text


def test_an_empty_plan_still_gives_a_page():
    audit = example_audit()
    plan = {"target": {"in_plane_mm": None, "axial_mm": None, "choose": "coarsest"}, "periods": [], "scans": []}
    bare = replace(audit, plan=plan, scan_records={}, achieved={}, harmonised_files=())
    page = Page(page_of(bare))
    assert page.wrong == []
    assert "No periods yet; no scans yet." in page.visible
    assert "There are no scans yet." in page.visible
    assert "No target could be decided" in page.visible


def test_the_verdict_says_which_passing_periods_have_no_scans():
    audit = example_audit()
    scans = [scan for scan in audit.plan["scans"] if scan["setup"] != "A"]
    page = Page(page_of(replace(audit, plan={**audit.plan, "scans": scans})))
    assert "2 of 7 periods pass, one of them without scans; " in page.visible
    page = Page(page_of(replace(audit, plan={**audit.plan, "scans": []}, harmonised_files=())))
    assert "2 of 7 periods pass; no scans yet." in page.visible


def test_every_measured_period_has_its_profile(html):
    for setup in PERIODS:
        session = "declared" if setup == "E" else "s1"
        article = re.search(rf'<article [^>]*id="period-{setup}.{session}".*?</article>', html, flags=re.DOTALL).group()
        assert (f"{setup} · s1: ph{setup}, " in article) == (setup in "ABCD")
        assert f'href="sites/site{setup}.html"' in article


def write_study(folder, audit):
    """The example as a study folder: settings, tables, records."""
    config = folder / "config"
    config.mkdir(parents=True)
    (config / "study.yaml").write_text("study: {title: Seven invented cameras}\ndemo: true\n", encoding="utf-8")
    setups = [f"{row['setup']}\t{row['site']}\t{row['scanner']}\t{row['reconstruction']}" for row in audit.setups]
    phantoms = [
        "\t".join(
            [
                row["phantom"],
                row["setup"],
                row["phantom_session"],
                row["acquired"],
                row["kind"],
                row["image"],
                "{diameters_mm: [10, 13, 17]}" if row["kind"] == "hot_spheres" else "",
            ]
        )
        for row in audit.phantoms
    ]
    scans = [f"{row['subject']}\tbase\t{row['setup']}\t2025-04-01\t{row['image']}" for row in audit.scans]
    for name, header, rows in (
        ("setups", "setup\tsite\tscanner\treconstruction", setups),
        ("phantoms", "phantom\tsetup\tphantom_session\tacquired\tkind\timage\tdetails", phantoms),
        ("scans", "subject\tsession\tsetup\tacquired\timage", scans),
    ):
        (config / f"{name}.tsv").write_text("\n".join([header, *rows]) + "\n", encoding="utf-8")
    plan = folder / "results" / "plan.json"
    plan.parent.mkdir()
    plan.write_text(json.dumps(audit.plan), encoding="utf-8")


def run_step(name, study_dir):
    command = [sys.executable, str(SCRIPTS / name), "--study-dir", str(study_dir)]
    return subprocess.run(command, capture_output=True, text=True, check=False)


def test_the_steps_write_tables_and_page_from_a_study_folder(tmp_path):
    audit = example_audit()
    write_study(tmp_path, audit)
    for name in ("make_audit_tables.py", "make_report.py"):
        done = run_step(name, tmp_path)
        assert (done.returncode, done.stderr) == (0, "")
    folder = tmp_path / "results" / "audit"
    written = sorted(path.relative_to(folder).as_posix() for path in folder.rglob("*") if path.is_file())
    tables = [
        "audit.json",
        "covariates.tsv",
        "queries.tsv",
        "report.html",
        "scans.csv",
        "scans.tsv",
        "sites.csv",
        "sites.tsv",
    ]
    assert written == sorted([*tables, *(f"sites/site{s}.{end}" for s in PERIODS for end in ("html", "json"))])
    lines = (folder / "sites.tsv").read_text(encoding="utf-8").splitlines()
    assert len(lines) == 1 + len(PERIODS)
    page = Page((folder / "report.html").read_text(encoding="utf-8"))
    # No record of any scan lies in the folder, and the page says so.
    assert "the harmonised data set is not clean." in page.visible


@pytest.mark.parametrize("name", ["make_audit_tables.py", "make_report.py"])
def test_a_step_without_a_plan_ends_with_one_line(tmp_path, name):
    write_study(tmp_path, example_audit())
    (tmp_path / "results" / "plan.json").unlink()
    done = run_step(name, tmp_path)
    assert done.returncode == 2
    assert len(done.stderr.splitlines()) == 1
    assert "plan.json" in done.stderr
