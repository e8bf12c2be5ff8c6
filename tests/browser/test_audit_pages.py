"""The audit's pages in a browser: sorting, filtering, printing, and a reader who sees, hears or types."""

import json
import re

import pytest
from selenium.webdriver.common.by import By
from selenium.webdriver.common.keys import Keys
from selenium.webdriver.support.ui import Select

from audit_example import PERIODS, VERDICTS
from browser_pages import axe_source, print_pages, requests_of, start_browser, write_pages

pytestmark = pytest.mark.browser


@pytest.fixture(scope="module")
def report(tmp_path_factory):
    return write_pages(tmp_path_factory.mktemp("audit"))


@pytest.fixture(scope="module", params=["light", "dark"])
def themed(request, tmp_path_factory):
    browser = start_browser(tmp_path_factory.mktemp("profile"), dark=request.param == "dark")
    browser.get("about:blank")
    shown = browser.execute_script("return matchMedia('(prefers-color-scheme: dark)').matches")
    assert shown == (request.param == "dark")
    yield browser
    browser.quit()


@pytest.fixture(scope="module")
def browser(tmp_path_factory):
    browser = start_browser(tmp_path_factory.mktemp("profile"))
    browser.set_window_size(1280, 1000)
    yield browser
    browser.quit()


@pytest.fixture
def page(browser, report):
    browser.get(report.as_uri())
    return browser


def rows(page, table):
    return page.find_elements(By.CSS_SELECTOR, f"#{table} > tbody > tr")


def shown_periods(page):
    bodies = page.find_elements(By.CSS_SELECTOR, "#periods-table > tbody")
    return [body.find_element(By.TAG_NAME, "th").text.split(" ")[0] for body in bodies if body.is_displayed()]


def heading(page, table, words):
    cells = page.find_elements(By.CSS_SELECTOR, f"#{table} thead th")
    return next(cell for cell in cells if cell.text.replace("\n", " ").startswith(words))


def sort_by(page, table, words):
    heading(page, table, words).find_element(By.TAG_NAME, "button").click()


def test_periods_sort_by_number_and_back_with_their_rows_together(page):
    assert shown_periods(page) == list(PERIODS)
    sort_by(page, "periods-table", "Measured")
    wanted = sorted(PERIODS, key=lambda setup: PERIODS[setup][0][0])
    assert shown_periods(page) == wanted
    cell = heading(page, "periods-table", "Measured")
    assert cell.get_attribute("aria-sort") == "ascending"
    sort_by(page, "periods-table", "Measured")
    assert shown_periods(page) == wanted[::-1]
    assert heading(page, "periods-table", "Measured").get_attribute("aria-sort") == "descending"
    for body in page.find_elements(By.CSS_SELECTOR, "#periods-table > tbody"):
        assert len(body.find_elements(By.CSS_SELECTOR, "tr:not(.why)")) == 2  # both directions stay in their group


def test_what_is_not_known_stays_at_the_end_both_ways(page):
    for _ in range(2):
        sort_by(page, "periods-table", "Achieved")
        assert set(shown_periods(page)[-3:]) == {"E", "F", "G"}


def test_scans_sort_by_days_as_numbers(page):
    sort_by(page, "scans-table", "Days from")
    days = [row.find_elements(By.CSS_SELECTOR, "td")[4].text for row in rows(page, "scans-table")]
    known = [int(text) for text in days if text != "–"]
    assert known == sorted(known)
    assert len(known) > 5
    assert all(text == "–" for text in days[len(known) :])


def test_sorting_works_from_the_keyboard(page):
    button = heading(page, "queries-table", "Who acts").find_element(By.TAG_NAME, "button")
    button.send_keys(Keys.ENTER)
    who = [row.find_elements(By.CSS_SELECTOR, "td")[1].text for row in rows(page, "queries-table")]
    assert who == sorted(who)
    assert len(set(who)) > 1


def test_scans_are_found_by_words_status_and_site(page):
    form = page.find_element(By.CSS_SELECTOR, 'form[data-for="scans-table"]')
    count = form.find_element(By.CSS_SELECTOR, "[role=status]")
    everything = len(rows(page, "scans-table"))
    assert count.text == f"{everything} in all"

    def shown():
        return [row.find_element(By.TAG_NAME, "th").text for row in rows(page, "scans-table") if row.is_displayed()]

    search = form.find_element(By.CSS_SELECTOR, "input")
    search.send_keys("COARSER_than a")  # two words, in any letter case
    assert shown() == ["sub-f01_ses-base", "sub-f02_ses-base"]
    assert count.text == f"2 of {everything} shown"
    form.find_element(By.CSS_SELECTOR, "button").click()
    page.execute_async_script("window.setTimeout(arguments[0], 50)")
    assert len(shown()) == everything
    Select(form.find_element(By.NAME, "site")).select_by_visible_text("siteA")
    Select(form.find_element(By.NAME, "status")).select_by_visible_text("held")
    assert shown() == ["sub-a03_ses-base", "sub-a04_ses-base"]


def test_periods_that_stand_out_are_found(page):
    form = page.find_element(By.CSS_SELECTOR, 'form[data-for="periods-table"]')
    marked = page.find_elements(By.CSS_SELECTOR, '#periods-table > tbody[data-out="yes"]')
    Select(form.find_element(By.NAME, "out")).select_by_value("yes")
    assert len(shown_periods(page)) == len(marked)
    assert {setup for setup, word in VERDICTS.items() if word != "pass"} <= set(shown_periods(page))
    Select(form.find_element(By.NAME, "verdict")).select_by_visible_text("coarser")
    assert shown_periods(page) == ["F"]


def test_filters_stand_aside_on_paper_unless_they_narrow_the_table(page):
    page.execute_cdp_cmd("Emulation.setEmulatedMedia", {"media": "print"})
    try:
        form = page.find_element(By.CSS_SELECTOR, 'form[data-for="scans-table"]')
        assert not form.is_displayed()
        assert not page.find_element(By.TAG_NAME, "nav").is_displayed()
        page.execute_cdp_cmd("Emulation.setEmulatedMedia", {"media": ""})
        form.find_element(By.CSS_SELECTOR, "input").send_keys("sub-a01")
        page.execute_cdp_cmd("Emulation.setEmulatedMedia", {"media": "print"})
        assert form.is_displayed()  # paper says that it shows a part only
        assert "1 of" in form.text
        assert not form.find_element(By.CSS_SELECTOR, "input").is_displayed()
        ink = page.execute_script("return getComputedStyle(document.body).color")
        assert ink == "rgb(0, 0, 0)"
    finally:
        page.execute_cdp_cmd("Emulation.setEmulatedMedia", {"media": ""})


def test_every_link_leads_somewhere(page, report):
    links = {link.get_attribute("href") for link in page.find_elements(By.CSS_SELECTOR, "a[href]")}
    inside = {link.split("#", 1)[1] for link in links if "#" in link}
    assert len(inside) > 10
    for name in inside:
        assert page.find_elements(By.ID, name), name
    files = {link for link in links if "#" not in link}
    assert files == {(report.parent / "sites" / f"site{setup}.html").as_uri() for setup in PERIODS}
    assert all((report.parent / "sites" / f"site{setup}.html").is_file() for setup in PERIODS)


@pytest.mark.parametrize("width", [1024, 1280, 1920])
def test_the_page_never_scrolls_sideways(page, width):
    page.set_window_size(width, 900)
    inner, whole = page.execute_script("return [window.innerWidth, document.documentElement.scrollWidth]")
    assert whole <= inner
    page.set_window_size(1280, 1000)


@pytest.fixture(params=["report", "siteA", "siteC"])
def path(request, report):
    return report if request.param == "report" else report.parent / "sites" / f"{request.param}.html"


def test_no_message_in_the_console_and_no_request_to_anywhere(browser, path):
    requests_of(browser)
    browser.get_log("browser")
    browser.get(path.as_uri())
    browser.execute_async_script("window.setTimeout(arguments[0], 300)")
    asked = [one for one in requests_of(browser) if not one.startswith("data:")]
    assert asked == [path.as_uri()]
    assert browser.get_log("browser") == []
    tried = browser.execute_async_script(
        "const done = arguments[0]; fetch('https://example.org/').then(() => done('gone'), () => done('stopped'))"
    )
    assert tried == "stopped"  # the page's own policy forbids it
    browser.get_log("browser")


def test_a_checker_of_accessibility_finds_nothing(themed, path):
    """axe-core, all of its rules: WCAG 2.0 and 2.1 at A and AA, and good practice."""
    themed.set_window_size(1280, 1000)
    themed.get(path.as_uri())
    themed.execute_script(axe_source())
    found = themed.execute_async_script(
        "const done = arguments[0]; axe.run(document).then(result => done(JSON.stringify({"
        "violations: result.violations.map(one => ({id: one.id, impact: one.impact, "
        "where: one.nodes.slice(0, 3).map(node => node.html)})), passes: result.passes.length})))"
    )
    result = json.loads(found)
    assert result["violations"] == []
    assert result["passes"] > 15


def luminance(colour):
    """Relative luminance of WCAG 2 of an `rgb(...)`."""
    parts = [int(part) / 255 for part in re.findall(r"\d+", colour)[:3]]
    linear = [part / 12.92 if part <= 0.04045 else ((part + 0.055) / 1.055) ** 2.4 for part in parts]
    return sum(weight * part for weight, part in zip((0.2126, 0.7152, 0.0722), linear, strict=True))


def test_words_stand_out_from_the_paper_in_both_themes(themed, report):
    themed.get(report.as_uri())
    dark = themed.execute_script("return matchMedia('(prefers-color-scheme: dark)').matches")
    paper = themed.execute_script("return getComputedStyle(document.body).backgroundColor")
    assert (luminance(paper) < 0.2) == dark
    for selector in (".soft", ".mark-fail", ".mark-pass", ".mark-coarser", "figcaption", "footer", ".chart text"):
        element = themed.find_element(By.CSS_SELECTOR, selector)
        words = "return getComputedStyle(arguments[0])[arguments[1]]"
        colour = themed.execute_script(words, element, "fill" if "chart" in selector else "color")
        first, second = sorted((luminance(colour), luminance(paper)), reverse=True)
        assert (first + 0.05) / (second + 0.05) >= 4.5, selector  # WCAG 2.1, 1.4.3


def test_the_report_prints(browser, report):
    pdf = print_pages(browser, report)
    assert pdf.startswith(b"%PDF")
    assert len(re.findall(rb"/Type /Page\b", pdf)) >= 5


@pytest.mark.parametrize("setup", list(PERIODS))
def test_a_usual_sites_record_prints_on_two_pages_at_most(browser, report, setup):
    pdf = print_pages(browser, report.parent / "sites" / f"site{setup}.html")
    assert 1 <= len(re.findall(rb"/Type /Page\b", pdf)) <= 2
