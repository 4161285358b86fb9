"""The report in a real browser: opened from a file, silent, and readable on a narrow screen."""

import os
import shutil
from pathlib import Path

import pytest

from pipeline.record import read_record
from pipeline.report import write_report

pytestmark = pytest.mark.browser

RECORDS = Path(__file__).parents[1] / "records"
ARGUMENTS = (
    "--no-sandbox",
    "--disable-gpu",
    "--disable-background-networking",
    "--disable-component-update",
    "--disable-sync",
    "--no-first-run",
)
CHROMIUM = shutil.which("chromium") or shutil.which("chromium-browser") or shutil.which("google-chrome")


@pytest.fixture(scope="module")
def browser():
    if CHROMIUM is None:
        if os.environ.get("CI") == "true":
            pytest.fail("Chromium is missing, and CI must run the browser tests.")
        pytest.skip("Chromium is not on this machine")
    from playwright.sync_api import sync_playwright

    with sync_playwright() as playwright:
        running = playwright.chromium.launch(executable_path=CHROMIUM, args=list(ARGUMENTS))
        yield running
        running.close()


@pytest.fixture(scope="module", params=["ready", "withheld"])
def report(request, tmp_path_factory):
    record = read_record(RECORDS / f"v1_{request.param}.json")
    page, _ = write_report(record, tmp_path_factory.mktemp("reports"), "loop")
    return record, page


@pytest.fixture
def opened(browser, report):
    record, path = report
    page = browser.new_page(viewport={"width": 1000, "height": 900})
    said, asked = [], []
    page.on("console", lambda message: said.append(message.text))
    page.on("pageerror", lambda error: said.append(str(error)))
    page.on("request", lambda request: asked.append(request.url))
    page.goto(path.as_uri())
    yield record, page, said, asked
    page.close()


def test_opens_from_a_file_without_a_word_or_a_request(opened):
    _, page, said, asked = opened
    assert said == []
    assert [url for url in asked if url != page.url] == []


def test_every_caution_is_visible(opened):
    record, page, *_ = opened
    for caution in record.cautions:
        assert page.get_by_text(caution.text).first.is_visible()


@pytest.mark.parametrize("width", [360, 1000])
def test_nothing_runs_off_the_side(opened, width):
    _, page, *_ = opened
    page.set_viewport_size({"width": width, "height": 800})
    assert page.evaluate("document.documentElement.scrollWidth") <= width


def test_prints_without_clipping(opened):
    _, page, *_ = opened
    page.emulate_media(media="print")
    page.set_viewport_size({"width": 680, "height": 900})  # A4 less its margins at 96 dots an inch
    assert page.evaluate("document.documentElement.scrollWidth") <= 680
    assert len(page.pdf(format="A4")) > 10_000


def test_figures_have_a_size_and_a_name(opened):
    record, page, *_ = opened
    images = page.get_by_role("img")
    assert images.count() == (1 if record.verdict == "withheld" else 3)
    for index in range(images.count()):
        box = images.nth(index).bounding_box()
        assert box["width"] > 300 and box["height"] > 150
