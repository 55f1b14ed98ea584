"""The page in a real browser: it opens, sorts, filters, shows a unit and its values, and prints."""

import base64
import json
import math
import re
import shutil
import time
from dataclasses import replace
from datetime import UTC, datetime
from urllib.parse import quote

import numpy as np
import pytest
from selenium import webdriver
from selenium.webdriver.chrome.service import Service
from selenium.webdriver.common.action_chains import ActionChains
from selenium.webdriver.common.keys import Keys

from fastsmooth.curve import Caution, Limits
from fastsmooth.fleet import Unit
from fastsmooth.report.page import page_text
from fastsmooth.report.rows import x_ends
from tests.curves import CASES
from tests.pages import many, renamed, small_fleet
from tests.test_page import NASTY, complete

MADE_AT = datetime(2026, 3, 1, 6, 30, tzinfo=UTC)
OPTIONS = (
    "--headless", "--no-sandbox", "--disable-gpu", "--disable-quic", "--no-first-run",
    "--disable-background-networking", "--disable-component-update", "--disable-sync",
    "--disable-dev-shm-usage", "--window-size=1280,1000",
)  # fmt: skip
UNITS = 500
PATIENCE_S = 20.0
# A page of 500 units takes well under a second on an idle machine.
OPENED_WITHIN_S = 5.0


@pytest.fixture(scope="module")
def browser(tmp_path_factory):
    paths = {}
    for name in ("chromium", "chromedriver"):
        paths[name] = shutil.which(name)
        if paths[name] is None:
            pytest.fail(f"{name} is missing: apt-get install chromium chromium-driver")
    options = webdriver.ChromeOptions()
    options.binary_location = paths["chromium"]
    for option in (*OPTIONS, f"--user-data-dir={tmp_path_factory.mktemp('profile')}"):
        options.add_argument(option)
    options.set_capability("goog:loggingPrefs", {"browser": "ALL", "performance": "ALL"})
    started = webdriver.Chrome(options=options, service=Service(paths["chromedriver"]))
    yield started
    started.quit()


@pytest.fixture(scope="module")
def fleet():
    return many(small_fleet(), UNITS)


@pytest.fixture(scope="module")
def address(fleet, tmp_path_factory):
    place = tmp_path_factory.mktemp("page") / "fleet.html"
    place.write_text(page_text(fleet, MADE_AT), encoding="utf-8")
    return place.as_uri()


@pytest.fixture
def table(browser, address):
    """The page with nothing opened; afterwards it must have kept quiet."""
    open_page(browser, address)
    yield browser
    assert_quiet(browser)


def assert_quiet(browser):
    """No complaint on the console, and nothing asked of any network."""
    assert browser.get_log("browser") == []
    for entry in browser.get_log("performance"):
        message = json.loads(entry["message"])["message"]
        if message["method"] == "Network.requestWillBeSent":
            assert message["params"]["request"]["url"].startswith("file:")


def wait_for(browser, script, *arguments):
    end = time.monotonic() + PATIENCE_S
    while time.monotonic() < end:
        found = browser.execute_script(f"return {script}", *arguments)
        if found:
            return found
        time.sleep(0.02)
    raise AssertionError(f"never true: {script}")


def open_page(browser, address):
    browser.get("about:blank")
    # What the browser asked for before is no concern of the page's.
    for kind in ("browser", "performance"):
        browser.get_log(kind)
    begun = time.monotonic()
    browser.get(address)
    wait_for(browser, "document.body.dataset.ready === 'yes'")
    return time.monotonic() - begun


def shown_units(browser):
    return browser.execute_script(
        "return [...document.querySelectorAll('tbody tr')].filter((row) => !row.hidden)"
        ".map((row) => Number(row.dataset.unit))"
    )


def press(browser, *keys):
    ActionChains(browser).send_keys(*keys).perform()


def show(browser, unit):
    browser.execute_script(
        "document.querySelector(`tr[data-unit='${arguments[0]}'] a`).click()", unit
    )
    wait_for(browser, "document.body.dataset.unit === String(arguments[0])", unit)


def values(browser):
    return dict(
        browser.execute_script(
            "return [...document.querySelectorAll('#values div')]"
            ".map((one) => [one.className, one.querySelector('dd').textContent])"
        )
    )


def number(text):
    return float(text.split(" ")[0].replace(",", "").replace("\N{MINUS SIGN}", "-"))


def assert_values(said, curve, place):
    """What the page says of a place is what the curve's table holds there, to its last digit."""
    assert said["x"].split(" °C")[0] == curve.axis.label(float(curve.x[place]))
    assert said["status"] == curve.statuses[place]
    lower, _, upper = said["band"].partition(" to ")
    told = {
        "estimate": said["estimate"], "lower": lower, "upper": upper or "none",
        "residual_sd": said["scatter"], "effective_rows": said["rows"],
    }  # fmt: skip
    for name, text in told.items():
        value = float(getattr(curve, name)[place])
        if not math.isfinite(value):
            assert text == "none"
            continue
        decimals = len(text.split(" ")[0].partition(".")[2])
        step = 0.5001 * 10.0**-decimals
        if name in ("residual_sd", "effective_rows"):
            step = 0.0051 * abs(value)
        assert number(text) == pytest.approx(value, abs=step), name


def test_five_hundred_units_open_at_once(browser, address):
    seconds = open_page(browser, address)
    assert seconds < OPENED_WITHIN_S
    begun = time.monotonic()
    show(browser, 2)
    assert time.monotonic() - begun < OPENED_WITHIN_S
    assert_quiet(browser)


def test_every_column_sorts_both_ways(table, fleet):
    def expected(value, descending):
        known = [unit for unit in range(UNITS) if value(unit) is not None]
        known.sort(key=lambda unit: (-value(unit) if descending else value(unit), unit))
        return known + [unit for unit in range(UNITS) if value(unit) is None]

    curves = [unit.curve for unit in fleet.units]
    names = {unit.status for unit in fleet.units}
    rank = {name: place for place, name in enumerate(sorted(names))}
    of = {
        "key": lambda unit: unit,
        "status": lambda unit: rank[fleet.units[unit].status],
        "rows": lambda unit: fleet.units[unit].rows,
        "width": lambda unit: curves[unit] and curves[unit].bandwidth,
        "scatter": lambda unit: curves[unit] and curves[unit].trace["engine"]["residual_sd"],
        "fit": lambda unit: curves[unit] and curves[unit].trace["fit"]["r2_left_out"],
        "cautions": lambda unit: len(curves[unit].cautions) if curves[unit] else None,
    }  # fmt: skip
    heads = table.find_elements("css selector", "thead th")
    assert len(heads) == len(of) + 1
    for kind, value in of.items():
        head = table.find_element("css selector", f"thead th.{kind}")
        button = head.find_element("css selector", "button")
        for _ in range(2):
            button.click()
            descending = head.get_attribute("aria-sort") == "descending"
            assert shown_units(table) == expected(value, descending), (kind, descending)
        assert len(table.find_elements("css selector", "thead [aria-sort]")) == 1
    table.find_element("css selector", "thead th.small button").click()
    assert shown_units(table) != list(range(UNITS))


def test_the_filter_finds_names_statuses_and_cautions(table, fleet):
    box = table.find_element("id", "filter")
    box.send_keys("LANT 01")
    named = [unit for unit in range(UNITS) if "01" in fleet.units[unit].name]
    assert shown_units(table) == named
    assert table.find_element("id", "shown").text == f"{len(named)} of 500 units"
    box.send_keys(" constant")
    expected = [unit for unit in named if fleet.units[unit].status == "x constant"]
    assert expected
    assert shown_units(table) == expected
    box.send_keys(" nothing like this")
    assert shown_units(table) == []
    assert table.find_element("id", "nothing").is_displayed()
    box.send_keys(Keys.CONTROL, "a")
    box.send_keys(Keys.BACKSPACE)
    assert len(shown_units(table)) == UNITS
    button = table.find_element("css selector", "button.find")
    code = button.get_attribute("data-find")
    button.click()
    assert shown_units(table) == [
        place for place, unit in enumerate(fleet.units) if code in unit.caution_codes
    ]
    button.click()
    assert len(shown_units(table)) == UNITS


def test_small_curves_change_their_scale(table):
    script = (
        "return [...document.querySelectorAll('tbody g')].map((one) => "
        "[one.getAttribute('transform') ?? '', one.dataset.common])"
    )
    for choice in ("own", "common"):
        table.find_element("css selector", f"input[value={choice}]").click()
        scales = table.execute_script(script)
        assert len(scales) == 400
        assert all(now == (common if choice == "common" else "") for now, common in scales)


def test_a_unit_opens_by_click_and_escape_goes_back(table, fleet):
    row = table.find_element("css selector", "tr[data-unit='6'] td.rows")
    row.click()
    wait_for(table, "document.body.dataset.unit === '6'")
    assert table.find_element("id", "name").text == fleet.units[6].name
    assert not table.find_element("id", "fleet").is_displayed()
    assert table.current_url.endswith(f"#plant={quote(fleet.units[6].key[0])}")
    press(table, Keys.ESCAPE)
    wait_for(table, "document.body.dataset.unit === undefined")
    assert table.find_element("id", "fleet").is_displayed()
    assert not table.find_element("id", "unit").is_displayed()
    assert table.switch_to.active_element.text == fleet.units[6].name


def test_a_unit_opens_by_keyboard(table, fleet):
    table.execute_script("document.querySelector(\"tr[data-unit='3'] a\").focus()")
    press(table, Keys.ARROW_DOWN)
    assert table.switch_to.active_element.text == fleet.units[4].name
    press(table, Keys.ARROW_UP)
    press(table, Keys.ENTER)
    wait_for(table, "document.body.dataset.unit === '3'")
    assert table.switch_to.active_element.get_attribute("id") == "name"
    after = table.find_element("id", "after")
    after.click()
    wait_for(table, "document.body.dataset.unit === '4'")
    table.find_element("id", "before").click()
    wait_for(table, "document.body.dataset.unit === '3'")


def test_before_and_after_keep_the_order_of_the_table(table, fleet):
    table.find_element("id", "filter").send_keys("x constant")
    table.find_element("css selector", "thead th.key button").click()
    order = shown_units(table)
    assert order == sorted(order, reverse=True)
    show(table, order[0])
    assert not table.find_element("id", "before").is_enabled()
    assert table.find_element("id", "reason").text == f"x constant: {fleet.units[4].reason}"
    assert not table.find_element("id", "picture").is_displayed()
    table.find_element("id", "after").click()
    wait_for(table, "document.body.dataset.unit === String(arguments[0])", order[1])


def test_pointing_at_the_picture_tells_the_values_of_the_table(table, fleet):
    for unit in (0, 3):
        show(table, unit)
        curve = fleet.units[unit].curve
        box = table.find_element("id", "curve")
        assert table.find_elements("css selector", "#values .hint")
        wide = box.size["width"]
        places = set()
        for share in (0.02, 0.3, 0.55, 0.71, 0.98):
            left, right = 62, wide - 18
            offset = round(left + share * (right - left) - wide / 2)
            ActionChains(table).move_to_element_with_offset(box, offset, 0).perform()
            low, high = x_ends(curve)
            x = low + (offset + wide / 2 - left) / (right - left) * (high - low)
            said = values(table)
            labels = [curve.axis.label(one) for one in curve.x.tolist()]
            place = labels.index(said["x"].split(" °C")[0])
            # The nearest point; the pointer's own place is only known to a pixel.
            pixel = (high - low) / (right - left)
            assert abs(curve.x[place] - x) <= 0.5 * (curve.x[1] - curve.x[0]) + 1.5 * pixel
            assert_values(said, curve, place)
            places.add(place)
        assert len(places) == 5
        press(table, Keys.ESCAPE)
        wait_for(table, "document.body.dataset.unit === undefined")


def test_arrow_keys_go_along_the_curve(table, fleet):
    show(table, 1)
    curve = fleet.units[1].curve
    table.execute_script("document.getElementById('curve').focus()")
    for key, place in (
        (Keys.HOME, 0), (Keys.ARROW_RIGHT, 1), (Keys.PAGE_UP, 26), (Keys.ARROW_LEFT, 25),
        (Keys.END, 255), (Keys.ARROW_RIGHT, 255),
    ):  # fmt: skip
        press(table, key)
        assert_values(values(table), curve, place)
        box = table.find_element("id", "curve")
        assert box.get_attribute("aria-valuenow") == str(place + 1)
        assert values(table)["x"] in box.get_attribute("aria-valuetext")


def test_an_address_leads_to_its_unit(browser, address, fleet):
    open_page(browser, f"{address}#plant={quote(fleet.units[42].key[0])}")
    assert browser.find_element("id", "name").text == "plant 042"
    open_page(browser, f"{address}#plant=none%20of%20these")
    assert browser.find_element("id", "fleet").is_displayed()
    assert_quiet(browser)


def test_it_prints_the_table_or_the_opened_unit(table):
    def prints(*names):
        return [table.find_element("css selector", name).is_displayed() for name in names]

    table.execute_cdp_cmd("Emulation.setEmulatedMedia", {"media": "print"})
    assert prints("#units", ".tools", "footer", "td.fit") == [True, False, True, True]
    printed = base64.b64decode(table.execute_cdp_cmd("Page.printToPDF", {})["data"])
    assert printed.startswith(b"%PDF")
    pages = len(re.findall(rb"/Type\s*/Page\b", printed))
    assert pages > 5
    show(table, 0)
    assert prints("#fleet", "nav", "#curve svg", "#criteria svg") == [False, False, True, True]
    printed = base64.b64decode(table.execute_cdp_cmd("Page.printToPDF", {})["data"])
    assert 1 <= len(re.findall(rb"/Type\s*/Page\b", printed)) <= 2
    table.execute_cdp_cmd("Emulation.setEmulatedMedia", {"media": ""})


@pytest.mark.parametrize("wide", [380, 640, 900, 1600])
def test_it_fits_windows_of_any_width(table, wide):
    size = {"width": wide, "height": 900, "deviceScaleFactor": 1, "mobile": False}
    table.execute_cdp_cmd("Emulation.setDeviceMetricsOverride", size)
    overflow = "return document.documentElement.scrollWidth - document.documentElement.clientWidth"
    assert table.execute_script(overflow) <= 0
    show(table, 0)
    assert table.execute_script(overflow) <= 0
    covered = table.execute_script(
        "const texts = [...document.querySelectorAll('#unit svg text')]"
        ".map((one) => [one.textContent, one.getBoundingClientRect()]);"
        "const found = [];"
        "texts.forEach(([a, one], i) => texts.slice(i + 1).forEach(([b, other]) => {"
        "  if (Math.min(one.right, other.right) - Math.max(one.left, other.left) > 1 &&"
        "      Math.min(one.bottom, other.bottom) - Math.max(one.top, other.top) > 4)"
        "    found.push([a, b]); }));"
        "return found"
    )
    assert covered == []
    table.execute_cdp_cmd("Emulation.clearDeviceMetricsOverride", {})


def test_names_that_look_like_code_are_text(browser, fleet, tmp_path):
    place = tmp_path / "nasty.html"
    made = renamed(fleet, [(name,) for name in NASTY])
    bad = "<b onclick=alert(1)>"
    curve = replace(fleet.units[0].curve, cautions=(Caution(bad, bad),))
    made = replace(made, units=(*made.units, Unit((bad,), "made", None, 5, curve)))
    place.write_text(page_text(made, MADE_AT), encoding="utf-8")
    open_page(browser, place.as_uri())
    assert len(shown_units(browser)) == len(NASTY) + 1
    for unit in (0, 1, 3, 7, len(NASTY)):
        show(browser, unit)
        assert browser.execute_script("return document.scripts.length") == 3
        assert browser.find_elements("css selector", "img, [onclick], [onerror]") == []
        press(browser, Keys.ESCAPE)
        wait_for(browser, "document.body.dataset.unit === undefined")
    show(browser, len(NASTY))
    (caution,) = browser.find_elements("css selector", "#about-curve .caution")
    assert caution.text == f"Caution {bad}"
    assert browser.execute_script("return document.getElementById('name').textContent") == bad
    assert_quiet(browser)


@pytest.mark.parametrize(
    "case",
    ["times", "log_scale", "durations", "large_numbers", "few_points", "gap", "no_curve", "given"],
)
def test_every_kind_of_curve_is_drawn(browser, tmp_path, case):
    settings = {"at": ["2"]} if case == "few_points" else {}
    curve = complete(CASES[case](), **settings)
    if case == "gap":
        limits = np.stack((curve.estimate - 8.0, curve.estimate + 8.0))
        curve = replace(curve, limits=Limits((0.1, 0.9), limits, (0.1, 0.9), 100))
    place = tmp_path / "curve.html"
    place.write_text(page_text(curve, MADE_AT), encoding="utf-8")
    open_page(browser, place.as_uri())
    browser.execute_script("document.getElementById('curve').focus()")
    press(browser, Keys.HOME)
    for point in (0, 1):
        said = values(browser)
        assert said["x"].startswith(curve.axis.label(float(curve.x[point])))
        assert said["status"] == curve.statuses[point]
        value = float(curve.estimate[point])
        if math.isfinite(value):
            assert number(said["estimate"]) == pytest.approx(value, rel=1e-3)
        else:
            assert said["estimate"] == "none"
        press(browser, Keys.ARROW_RIGHT)
    drawn = browser.execute_script(
        "return ['.line', '.point', 'path.limit', '.strip', '.ribbon', '#criteria .path']"
        ".map((name) => document.querySelectorAll(name).length)"
    )
    lines, points, limits, strips, _, paths = drawn
    assert (points > 0) == (case == "few_points")
    assert (lines > 0) == (case not in ("few_points", "no_curve"))
    assert limits == (2 if case == "gap" else 0)
    assert strips > 50
    assert paths == 2
    assert ("given 3 °C" in browser.find_element("id", "criteria").text) == (case == "given")
    assert "NaN" not in browser.execute_script("return document.getElementById('unit').innerHTML")
    assert_quiet(browser)
