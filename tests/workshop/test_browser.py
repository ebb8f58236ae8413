"""Every report in a real browser: no complaint in its console, nothing wider than a phone's or a desk's window."""

import re
from pathlib import Path

import chromium
import numpy as np
import pytest

from hyperforecast.device import DeviceFolder, update, weigh
from hyperforecast.increments import check_increment
from hyperforecast.settings import Plan, Settings
from hyperforecast.workshop.contest import load_contest
from hyperforecast.workshop.demo import run_demo
from hyperforecast.workshop.reporting.contest_report import contest_page
from hyperforecast.workshop.reporting.demo_report import demo_page
from hyperforecast.workshop.reporting.device_report import device_document, device_page
from hyperforecast.workshop.reporting.page import Page
from hyperforecast.workshop.reporting.records_report import records_page
from hyperforecast.workshop.reporting.update_report import update_document, update_page
from hyperforecast.workshop.reporting.weighing_report import weighing_page

pytestmark = pytest.mark.skipif(chromium.COMMAND is None, reason=chromium.INSTALL)

BENCH = Path(__file__).parents[2] / "bench_streams"
PHONE, DESK = 390, 1280
LENIENT = {"most_lost": 1.0, "most_lost_by_class": 1.0}
LONG = "a batch whose supplier changed the alloy, wetted the parts and mixed up the boxes, as the foreman told us. " * 8


@pytest.fixture(scope="module")
def browser():
    with chromium.Browser() as browser:
        yield browser


def clouds(labels, seed):
    rng = np.random.default_rng(seed)
    y = np.repeat(labels, 10)
    places = {label: np.random.default_rng([7, *label.encode()]).normal(0, 4, 6) for label in labels}
    return check_increment(np.stack([places[label] for label in y.tolist()]) + rng.normal(0, 1, (len(y), 6)), y)


@pytest.fixture(scope="module")
def device(tmp_path_factory, forecasters):
    """A device with many classes of trying names, an update of each kind."""
    folder = DeviceFolder(tmp_path_factory.mktemp("device") / "arm")
    wa = forecasters["wa"]
    update(folder, clouds([f"family {n}" for n in range(40)], 0), plan=Plan("wa", 8, 3, 32, 600))
    names = ["x" * 300, "<script>alert(1)</script>", "قفل", "螺母 " * 40]
    update(folder, clouds(names + [f"other {n}" for n in range(8)], 1), forecaster=wa, **LENIENT)
    update(folder, clouds(["last"], 2), forecaster=wa, settings=Settings(0.5, 0.001, 1), by="P. Tinker, " * 20,
           because=LONG[:900], most_lost=0.0, most_lost_by_class=0.0)
    update(folder, clouds(["last"], 2), forecaster=wa, most_lost=0.0, most_lost_by_class=0.0, retries=3)
    return folder


@pytest.fixture(scope="module")
def pages(device, records, forecasters):
    """Every kind of report that there is, by name."""
    weighing = weigh(device, clouds(["last"], 3), settings=Settings(0.1, 1.0, 3), forecasters=forecasters)
    device = device.read()
    made = {"demo": demo_page(run_demo(seed=0), seed=0), "records": records_page(records),
            "device": device_page(device_document(device, name="arm")),
            "weighing": weighing_page(weighing, name="arm")}
    for number in (1, 2, 3, 4):
        made[f"update {number}"] = update_page(update_document(device, number, name="arm"))
    for kind in ("one_step", "whole_stream"):
        made[f"contest {kind}"] = contest_page(load_contest(BENCH / f"contest_{kind}.json"))
    return made


NAMES = ["demo", "records", "device", "weighing", "contest one_step", "contest whole_stream",
         *(f"update {number}" for number in (1, 2, 3, 4))]


@pytest.mark.parametrize("width", [PHONE, DESK])
@pytest.mark.parametrize("name", NAMES)
def test_a_report_fits_its_window_and_nothing_complains(browser, pages, tmp_path, name, width):
    pages[name].write(tmp_path / "report.html")
    browser.open(tmp_path / "report.html", width=width)
    assert browser.value("innerWidth") == width and browser.value("document.querySelectorAll('svg').length") >= 1
    assert browser.beyond() == []
    assert browser.complaints == []
    # Drawn, not empty: every picture has a size, and text is large enough to read.
    sizes = browser.value("[...document.querySelectorAll('svg, img')].map(one => one.getBoundingClientRect().height)")
    assert min(sizes) > 20
    smallest = browser.value("""Math.min(...[...document.querySelectorAll('svg')].map(one =>
        one.getBoundingClientRect().width / one.viewBox.baseVal.width * 9))""")
    assert smallest >= 7.5


@pytest.mark.parametrize("number", [1, 2, 3, 4])
def test_an_update_prints_on_one_sheet_of_a4(browser, pages, tmp_path, number):
    pages[f"update {number}"].write(tmp_path / "report.html")
    browser.open(tmp_path / "report.html", width=DESK)
    printed = browser.pdf()
    assert len(re.findall(rb"/Type\s*/Page\b", printed)) == 1
    left, bottom, right, top = map(float, re.search(rb"/MediaBox\s*\[([^]]*)\]", printed)[1].split())
    # ISO 216: A4 is 210 mm by 297 mm, a point is 1/72 inch.
    assert (right - left, top - bottom) == pytest.approx((210 / 25.4 * 72, 297 / 25.4 * 72), abs=1)


def test_an_update_with_much_to_tell_prints_on_one_sheet_too(browser, device, tmp_path):
    document, long = update_document(device.read(), 2, name="arm"), "word " * 60
    entry = document["update"]
    advice = {**entry["advice"], "reasons": [long] * 3,
              "familiarity": {**entry["advice"]["familiarity"], "familiar": False, "why": [long] * 5}}
    tried = {**entry, "reasons": [long] * 5}
    update_page({**document, "verdict": "rolled back", "update": {
        **tried, "advice": advice, "kept": False, "earlier_tries": [tried], "doubts": [long] * 6,
        "limits": {"given_up": [long] * 2},
        "unfamiliar": {"policy": "try 4", "tried": [{"check_accuracy": 0.5}] * 4}}}).write(tmp_path / "report.html")
    browser.open(tmp_path / "report.html", width=DESK)
    assert len(re.findall(rb"/Type\s*/Page\b", browser.pdf())) == 1


def test_the_check_finds_what_is_wrong(browser, tmp_path):
    page = Page("t", "l")
    page.paragraph("p")
    broken = page.html().replace("<p>p</p>", '<p><span style="white-space: nowrap">' + "wide " * 300 + "</span></p>"
                                 '<script>console.log("x")</script><img src="https://example.invalid/a.png">')
    (tmp_path / "broken.html").write_text(broken)
    browser.open(tmp_path / "broken.html", width=PHONE)
    assert browser.beyond()
    # The page's own policy lets neither a script nor a foreign picture in, and says so.
    assert len(browser.complaints) == 2 and all("Content Security Policy" in one for one in browser.complaints)
    (tmp_path / "logs.html").write_text("<!DOCTYPE html><script>console.error('a'); undefined.b</script>")
    browser.open(tmp_path / "logs.html", width=PHONE)
    assert len(browser.complaints) == 2
