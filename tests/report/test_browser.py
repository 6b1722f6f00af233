"""The page in headless Chromium: at phone and desktop width, with the network watched."""

import base64
import io
import json
import os
import re
import shutil

import pytest

from remnantstats.report import write_report

pytestmark = pytest.mark.browser

_FLAGS = [
    "--headless",
    "--no-sandbox",
    "--disable-gpu",
    "--disable-quic",
    "--no-first-run",
    "--disable-background-networking",
    "--disable-component-update",
    "--disable-sync",
    "--disable-dev-shm-usage",
    "--hide-scrollbars",
]


def _absent():
    for name in ("chromium", "chromedriver"):
        if shutil.which(name) is None:
            return f"{name} was not found"
    return ""


@pytest.fixture(scope="module")
def browser(tmp_path_factory):
    if _absent():
        if os.environ.get("CI"):
            pytest.fail(_absent())
        pytest.skip(_absent())
    from selenium import webdriver
    from selenium.webdriver.chrome.service import Service

    options = webdriver.ChromeOptions()
    options.binary_location = shutil.which("chromium")
    for flag in (*_FLAGS, f"--user-data-dir={tmp_path_factory.mktemp('profile')}"):
        options.add_argument(flag)
    options.set_capability("goog:loggingPrefs", {"browser": "ALL", "performance": "ALL"})
    driver = webdriver.Chrome(options=options, service=Service(shutil.which("chromedriver")))
    yield driver
    driver.quit()


@pytest.fixture(scope="module")
def address(contents, tmp_path_factory):
    return write_report(contents, tmp_path_factory.mktemp("browser")).as_uri()


def opened(browser, address, width, dark=False):
    """Open the page at a width; give the addresses that it asked for."""
    feature = {"name": "prefers-color-scheme", "value": "dark" if dark else "light"}
    browser.execute_cdp_cmd("Emulation.setEmulatedMedia", {"features": [feature]})
    size = {"width": width, "height": 850, "deviceScaleFactor": 1, "mobile": width < 600}
    browser.execute_cdp_cmd("Emulation.setDeviceMetricsOverride", size)
    for kind in ("performance", "browser"):
        browser.get_log(kind)
    browser.get(address)
    messages = [json.loads(entry["message"])["message"] for entry in browser.get_log("performance")]
    return [item["params"]["request"]["url"] for item in messages if item["method"] == "Network.requestWillBeSent"]


@pytest.mark.parametrize("width", [390, 1280])
def test_the_page_stands_alone(browser, address, width):
    asked = [url for url in opened(browser, address, width) if not url.startswith("data:")]
    assert asked == [address]
    assert [entry for entry in browser.get_log("browser") if entry["level"] in ("SEVERE", "WARNING")] == []
    entries = browser.execute_script("return performance.getEntriesByType('resource').map(item => item.name)")
    assert [name for name in entries if not name.startswith("data:")] == []


@pytest.mark.parametrize("width", [390, 1280])
def test_every_figure_is_loaded_and_nothing_runs_over(browser, address, width):
    opened(browser, address, width)
    browser.execute_script("document.querySelectorAll('details').forEach(item => item.open = true)")
    loaded = browser.execute_script("return [...document.images].map(item => item.complete && item.naturalWidth)")
    assert len(loaded) >= 11 and all(value > 0 for value in loaded)
    assert browser.execute_script("return document.documentElement.scrollWidth") <= width
    over = browser.execute_script(
        "return [...document.querySelectorAll('main p, main li, h1, h2, h3, dd, figure, .scroll')]"
        ".filter(item => item.getBoundingClientRect().right > innerWidth + 1).map(item => item.outerHTML.slice(0, 80))"
    )
    assert over == []


@pytest.mark.parametrize(("width", "dark"), [(390, False), (1280, False), (1280, True)])
def test_the_screenshot_is_not_blank(browser, address, width, dark):
    from PIL import Image

    opened(browser, address, width, dark)
    image = Image.open(io.BytesIO(browser.get_screenshot_as_png())).convert("L")
    shades = image.histogram()
    paper = max(range(256), key=shades.__getitem__)
    assert (paper < 64) if dark else (paper > 200)
    assert sum(count for shade, count in enumerate(shades) if abs(shade - paper) > 60) > 0.005 * sum(shades)


def test_tables_sort_by_keyboard(browser, address):
    from selenium.webdriver.common.keys import Keys

    opened(browser, address, 1280)
    button = browser.find_elements("css selector", "#table-results thead button")[1]
    keys = "return [...document.querySelectorAll('#table-results tbody tr')].map(r => Number(r.cells[1].dataset.key))"
    button.send_keys(Keys.ENTER)
    values = browser.execute_script(keys)
    assert values == sorted(values)
    button.send_keys(Keys.ENTER)
    assert browser.execute_script(keys) == sorted(values, reverse=True)
    assert button.find_element("xpath", "..").get_attribute("aria-sort") == "descending"


def test_the_first_screen_holds_the_answer(browser, address):
    opened(browser, address, 1280)
    bottoms = browser.execute_script(
        "return [...document.querySelectorAll('.answer dd')].map(item => item.getBoundingClientRect().bottom)"
    )
    assert len(bottoms) == 3 and max(bottoms) < 850


def test_it_prints_on_few_pages(browser, address):
    opened(browser, address, 1280)
    printed = browser.execute_cdp_cmd("Page.printToPDF", {"preferCSSPageSize": True})
    pages = len(re.findall(rb"/Type\s*/Page[^s]", base64.b64decode(printed["data"])))
    assert 3 <= pages <= 8
