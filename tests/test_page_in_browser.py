"""The page of an appendix in a real browser: headless Chromium through its driver."""

import base64
import csv
import io
import json
import re
import shutil
import time
from functools import cache
from importlib.resources import files

import pytest
from documents import AUDIT, HOSTILE, LEDGER, PLAIN, SIZES, hostile_document

import mixbridge
from mixbridge.demo import apiaries
from mixbridge.report.as_html import html

BROWSER = shutil.which("chromium") or shutil.which("chromium-browser") or shutil.which("google-chrome")
DRIVER = shutil.which("chromedriver")
pytestmark = pytest.mark.skipif(
    BROWSER is None or DRIVER is None, reason="no browser: chromium and chromedriver are not both installed"
)

RECORD = {"schema": 1, "name": "</script>\u202e", "value": 0.1}


@pytest.fixture(scope="module")
def pages(tmp_path_factory):
    """Write the pages once: a plain one, and one of hostile names."""
    directory = tmp_path_factory.mktemp("pages")
    record = json.dumps(RECORD)
    (directory / "plain.html").write_text(html(PLAIN, {"record.json": record}), encoding="utf-8")
    (directory / "hostile.html").write_text(html(hostile_document()), encoding="utf-8")
    return directory


@pytest.fixture(scope="module")
def browser(tmp_path_factory):
    webdriver = pytest.importorskip("selenium.webdriver")
    saved = tmp_path_factory.mktemp("saved")
    options = webdriver.ChromeOptions()
    options.binary_location = BROWSER
    for argument in (
        "--headless=new",
        "--no-sandbox",  # tests may run as root, and open only pages that they wrote
        "--disable-dev-shm-usage",
        "--disable-gpu",
        "--disable-background-networking",
        "--no-first-run",
        f"--user-data-dir={tmp_path_factory.mktemp('profile')}",
    ):
        options.add_argument(argument)
    options.add_experimental_option("prefs", {"download.default_directory": str(saved)})
    options.set_capability("goog:loggingPrefs", {"browser": "ALL", "performance": "ALL"})
    driver = webdriver.Chrome(options=options, service=webdriver.ChromeService(executable_path=DRIVER))
    driver.saved = saved
    yield driver
    driver.quit()


def show(browser, page, *, scheme="light", width=1280, height=900):
    """Open a page in a colour scheme and a width."""
    browser.execute_cdp_cmd(
        "Emulation.setEmulatedMedia", {"features": [{"name": "prefers-color-scheme", "value": scheme}]}
    )
    browser.execute_cdp_cmd(
        "Emulation.setDeviceMetricsOverride",
        {"width": width, "height": height, "deviceScaleFactor": 1, "mobile": width < 600},
    )
    browser.get(page.as_uri())


def saved_text(browser, name):
    """Wait for a download and return its text."""
    file = browser.saved / name
    until = time.monotonic() + 10
    while time.monotonic() < until and not (file.exists() and not list(browser.saved.glob("*.crdownload"))):
        time.sleep(0.05)
    text = file.read_bytes().decode("utf-8")
    file.unlink()
    return text


def cells(browser, table, column):
    """Return a column of a table as shown."""
    script = (
        "return [...document.querySelector(arguments[0] + ' tbody').rows]"
        ".map(row => row.cells[arguments[1]].textContent)"
    )
    return browser.execute_script(script, table, column)


def press(browser, selector, *keys):
    """Type into an element, as the keyboard does."""
    browser.find_element("css selector", selector).send_keys(*keys)


@cache
def axe():
    return files("axe_core_python").joinpath("axe.min.js").read_text(encoding="utf-8")


NAMES = ("plain", "hostile")


def loads_in_peace(browser, page):
    """Check that a page logs nothing, asks for nothing but itself, and runs no code of a user."""
    browser.get("about:blank")
    browser.get_log("browser"), browser.get_log("performance")
    show(browser, page)
    time.sleep(0.2)
    assert browser.get_log("browser") == []
    messages = [json.loads(entry["message"])["message"] for entry in browser.get_log("performance")]
    asked = {
        part["params"]["request"]["url"] for part in messages if part["method"] == "Network.requestWillBeSent"
    }
    assert asked == {page.as_uri()}
    assert browser.execute_script("return window.pwned === undefined")
    assert browser.execute_script("return document.querySelectorAll('.table').length > 0")


def is_accessible(browser, page, scheme):
    """Check that axe-core finds nothing."""
    pytest.importorskip("axe_core_python", reason="axe-core-python is not installed")
    show(browser, page, scheme=scheme)
    browser.execute_script(axe())
    found = browser.execute_async_script(
        "const done = arguments[0]; axe.run({resultTypes: ['violations']}).then(r => done(r.violations.map("
        "v => [v.id, v.help, v.nodes.slice(0, 3).map(n => n.html.slice(0, 200))])), e => done(String(e)))"
    )
    assert found == []


def fits_a_phone(browser, page):
    """Check that what is wider than the page scrolls in a box of its own, which the keyboard reaches."""
    show(browser, page, width=360, height=740)
    assert browser.execute_script("return document.documentElement.scrollWidth") <= 360
    assert browser.execute_script("return document.querySelector('nav details')?.open ?? false") is False
    boxes = "return [...document.querySelectorAll('.scroll')].filter(b => b.scrollWidth > b.clientWidth)"
    assert browser.execute_script(f"{boxes}.every(b => b.tabIndex === 0)")
    return browser.execute_script(f"{boxes}.length")


def prints(browser, page):
    """Check that a page prints on white, with nothing cut off by a box and no buttons, and return its PDF."""
    show(browser, page, scheme="dark")
    printed = browser.execute_cdp_cmd("Page.printToPDF", {"preferCSSPageSize": True, "printBackground": True})
    browser.execute_cdp_cmd("Emulation.setEmulatedMedia", {"media": "print"})
    style = "return getComputedStyle(document.querySelector(arguments[0]))[arguments[1]]"
    assert browser.execute_script(style, "body", "backgroundColor") == "rgb(255, 255, 255)"
    assert browser.execute_script(style, ".scroll", "overflowX") == "visible"
    assert browser.execute_script(style, ".download", "display") == "none"
    browser.execute_cdp_cmd("Emulation.setEmulatedMedia", {"media": ""})
    return base64.b64decode(printed["data"])


@pytest.mark.parametrize("name", NAMES)
def test_a_page_loads_without_errors_and_asks_for_nothing(browser, pages, name):
    loads_in_peace(browser, pages / f"{name}.html")


@pytest.mark.parametrize(("name", "scheme"), [("plain", "light"), ("plain", "dark"), ("hostile", "light")])
def test_axe_finds_no_violation(browser, pages, name, scheme):
    is_accessible(browser, pages / f"{name}.html", scheme)


def test_a_page_fits_a_phone(browser, pages):
    assert fits_a_phone(browser, pages / "plain.html") >= 2
    fits_a_phone(browser, pages / "hostile.html")


def test_a_page_prints_in_full(browser, pages):
    for name in NAMES:
        data = prints(browser, pages / f"{name}.html")
        assert data.startswith(b"%PDF-")
        counts = [int(found) for found in re.findall(rb"/Count (\d+)", data)]
        assert max(counts) >= 3


def test_the_appendix_of_the_demonstration_data_passes_every_check(browser, tmp_path):
    study = mixbridge.crosscheck(
        "honey ~ forage + feeding + altitude", apiaries(), unit="apiary", period="season"
    )
    page = study.appendix(tmp_path / "appendix.html")
    loads_in_peace(browser, page)
    is_accessible(browser, page, "dark")
    assert fits_a_phone(browser, page) >= 1
    assert prints(browser, page).startswith(b"%PDF-")
    show(browser, page)
    browser.find_element("css selector", ".attachments a").click()
    record = json.loads(saved_text(browser, "record.json"))
    assert record["primary"] == "reml"
    assert record["fits"]["reml"]["coefficients"]["forage"] == study.fit("reml").coefficients["forage"]


def test_the_colours_follow_the_reader(browser, pages):
    shade = "return getComputedStyle(document.body).backgroundColor"
    show(browser, pages / "plain.html")
    light = browser.execute_script(shade)
    show(browser, pages / "plain.html", scheme="dark")
    assert browser.execute_script(shade) != light


def test_a_click_sorts_up_then_down_then_as_written(browser, pages):
    show(browser, pages / "plain.html")
    written = cells(browser, "#table-ledger", 2)
    button = browser.find_element("css selector", "#table-ledger th:nth-child(3) button")
    head = browser.find_element("css selector", "#table-ledger th:nth-child(3)")
    button.click()
    assert head.get_attribute("aria-sort") == "ascending"
    assert (
        cells(browser, "#table-ledger", 2)
        == ["-0.005176"] * 3 + ["21.13"] * 3 + ["26.29"] * 3 + ["inf"] * 3 + ["-"] * 3
    )
    assert browser.find_element("id", "said").get_attribute("textContent") == "Sorted by estimate, ascending."
    button.click()
    assert head.get_attribute("aria-sort") == "descending"
    assert cells(browser, "#table-ledger", 2)[:4] == ["inf"] * 3 + ["26.29"]
    assert cells(browser, "#table-ledger", 2)[-3:] == ["-"] * 3
    button.click()
    assert head.get_attribute("aria-sort") is None
    assert cells(browser, "#table-ledger", 2) == written


def test_the_keyboard_skips_to_the_text_and_sorts(browser, pages):
    chains = pytest.importorskip("selenium.webdriver")
    tab, enter, space = "\ue004", "\ue007", " "  # as WebDriver writes keys

    def press_tab():
        chains.ActionChains(browser).send_keys(tab).perform()
        return browser.switch_to.active_element

    show(browser, pages / "plain.html")
    focused = press_tab()
    assert focused.text == "Skip to the text"
    assert focused.rect["x"] >= 0
    focused.send_keys(enter)
    assert browser.switch_to.active_element.get_attribute("id") == "content"
    for _ in range(12):
        focused = press_tab()
        if focused.text == "term":
            break
    assert focused.text == "term"
    assert browser.execute_script("return getComputedStyle(arguments[0]).outlineStyle", focused) == "solid"
    focused.send_keys(space)
    assert cells(browser, "#table-ledger", 0) == sorted(cells(browser, "#table-ledger", 0), key=str.lower)
    focused.send_keys(enter)
    assert cells(browser, "#table-ledger", 0)[0] == "Intercept"


def test_words_with_numbers_sort_by_the_number(browser, pages):
    show(browser, pages / "plain.html")
    press(browser, "#table-sizes th button", " ")
    assert cells(browser, "#table-sizes", 0) == [row[0] for row in SIZES.rows]


def test_a_saved_table_has_all_digits(browser, pages):
    show(browser, pages / "plain.html")
    for table in (LEDGER, AUDIT):
        press(browser, f"#table-{table.name} .download", " ")
        rows = list(csv.reader(io.StringIO(saved_text(browser, f"{table.name}.csv"), newline="")))
        assert rows[0] == list(table.header)
        for line, row in zip(rows[1:], table.rows, strict=True):
            for shown, cell in zip(line, row, strict=True):
                assert (
                    float(shown) == pytest.approx(cell, rel=0, abs=0, nan_ok=True)
                    if isinstance(cell, float)
                    else shown == str(cell)
                )


def test_a_saved_table_gives_names_back_and_runs_no_formula(browser, pages):
    show(browser, pages / "hostile.html")
    press(browser, "#table-names .download", " ")
    rows = list(csv.reader(io.StringIO(saved_text(browser, "names.csv"), newline="")))
    assert len(rows) == len(HOSTILE) + 1
    for name, (first, value, _) in zip(HOSTILE, rows[1:], strict=True):
        kept = name.replace("\ud800", "?").replace("\x00", "\ufffd").replace("\x07", "\ufffd")
        guarded = f"'{kept}" if kept[:1] in set("=+-@＝\t") and kept != "-" else kept
        assert first == guarded
        assert not first.startswith(("=", "+", "@", "\t", "\r", "＝"))
        assert float(value) % 1 == pytest.approx(0.123456789)


def test_the_record_is_saved_as_it_is(browser, pages):
    show(browser, pages / "plain.html")
    browser.find_element("css selector", ".attachments a").click()
    assert json.loads(saved_text(browser, "record.json")) == RECORD


def test_without_its_script_a_page_is_complete(browser, pages):
    browser.execute_cdp_cmd("Emulation.setScriptExecutionDisabled", {"value": True})
    try:
        show(browser, pages / "plain.html")
        assert len(browser.find_elements("css selector", "tbody tr")) == 15 + 60 + 4 + 3
        assert browser.find_elements("css selector", "button") == []
        assert browser.find_element("css selector", "nav li").is_displayed()
    finally:
        browser.execute_cdp_cmd("Emulation.setScriptExecutionDisabled", {"value": False})
