"""The pages in a real browser: they answer, say nothing on the console and ask for nothing."""

import json
from dataclasses import replace
from pathlib import Path

import pytest

from report.sample import device, lot
from sensorgrade.frames.inventory import find_devices
from sensorgrade.grading.grade import grade
from sensorgrade.inspection import inspect_device
from sensorgrade.lot.failure import Failure
from sensorgrade.lot.result_json import result_json
from sensorgrade.recipe.library import find_recipe
from sensorgrade.recipe.load import load_recipe
from sensorgrade.report.device_data import VERDICTS
from sensorgrade.report.device_page import device_page
from sensorgrade.report.lot_page import lot_page
from sensorgrade.simulate.demo import demo_lot, write_demo
from sensorgrade.stages import vocabulary

CHROMIUM = Path("/usr/bin/chromium")
ARGUMENTS = (
    "--headless",
    "--no-sandbox",
    "--disable-gpu",
    "--disable-quic",
    "--no-first-run",
    "--disable-background-networking",
    "--disable-component-update",
    "--disable-sync",
)
WIDTHS = (1440, 1024, 390)
# Pixels of a part of a canvas, read from a copy: the page's own need not be readable
PIXELS = """(source, left, top, width, height) => {
  const copy = document.createElement("canvas");
  Object.assign(copy, { width, height });
  const context = copy.getContext("2d", { willReadFrequently: true });
  context.drawImage(source, left, top, width, height, 0, 0, width, height);
  return context.getImageData(0, 0, width, height).data; }"""

pytestmark = [
    pytest.mark.browser,
    pytest.mark.skipif(not CHROMIUM.exists(), reason=f"needs {CHROMIUM}"),
]


@pytest.fixture(scope="module")
def browser():
    api = pytest.importorskip("playwright.sync_api")
    with api.sync_playwright() as playwright:
        started = playwright.chromium.launch(executable_path=str(CHROMIUM), args=list(ARGUMENTS))
        yield started
        started.close()


@pytest.fixture(scope="module")
def sample():
    return device(shape=(1600, 2000), hot=80)


@pytest.fixture(scope="module")
def files(sample, tmp_path_factory):
    folder = tmp_path_factory.mktemp("pages")
    (folder / "device.html").write_text(device_page(sample.result, **sample.parts))
    results, recipe = lot(150)
    failed = [Failure("CX-9001", "CX-9001", "lot 7", None, None, None, "no usable frames")]
    (folder / "lot.html").write_text(
        lot_page(results, failures=failed, recipe=recipe, name="lot 7")
    )
    return folder


@pytest.fixture
def opened(browser, files):
    """Opens a page; at the end it must have said nothing and asked for nothing else."""
    said, asked, contexts = [], [], []

    def open_page(name, *, width=1440, colours="light", ready="body"):
        context = browser.new_context(
            viewport={"width": width, "height": 900},
            color_scheme=colours,
            reduced_motion="reduce",
        )
        contexts.append(context)
        page = context.new_page()
        page.on("console", lambda message: said.append(message.text))
        page.on("pageerror", lambda error: said.append(str(error)))
        page.on("request", lambda request: asked.append(request.url))
        page.goto((files / name).as_uri())
        page.wait_for_selector(ready)
        return page

    yield open_page
    for context in contexts:
        context.close()
    assert said == []
    assert all(url.startswith(("file:", "data:", "blob:")) for url in asked)
    assert sum(url.startswith("file:") for url in asked) == len(contexts)


@pytest.fixture
def device_tab(opened):
    return opened("device.html", ready="#viewer[data-ready]")


@pytest.fixture
def lot_tab(opened):
    return opened("lot.html", ready="#mover[data-ready]")


def texts(tab, selector):
    return [one.strip() for one in tab.locator(selector).all_inner_texts()]


@pytest.mark.parametrize("width", WIDTHS)
@pytest.mark.parametrize("name", ["device.html", "lot.html"])
def test_nothing_is_wider_than_the_window(opened, name, width):
    tab = opened(name, width=width, colours="dark")
    assert tab.evaluate("document.documentElement.scrollWidth") <= width


def test_a_click_on_a_defect_shows_its_own_pixel_in_every_master(device_tab, sample):
    device_tab.select_option("#by-kind", label="hot")
    row = device_tab.locator("#defect-table tbody tr").nth(3)
    x, y = (int(row.locator("td").nth(one).inner_text()) for one in (1, 2))
    row.locator("button").click()
    readout = device_tab.locator("#readout").inner_text()
    assert f"x {x}, y {y}" in readout
    assert "hot" in readout
    # The value read is that of the master, to the fineness of the page's coding (0.1 %)
    dark = sample.masters.dark.values[y - 1, x - 1]
    found = float(readout.split("master dark ")[1].split(" ")[0])
    assert found == pytest.approx(float(dark), rel=2e-3)
    # ... and the brightest spot in the middle of the picture is that pixel
    middle = device_tab.evaluate(
        """() => new Promise((done) => requestAnimationFrame(() => requestAnimationFrame(() => {
        const c = document.querySelectorAll(".pane canvas")[1];
        done(("""
        + PIXELS
        + """)(c, c.width / 2 - 3, c.height / 2 - 3, 3, 3)[0]); })))"""
    )
    assert middle > 200


def test_a_layer_of_the_overlay_can_be_switched(device_tab):
    def drawn():
        return device_tab.evaluate(
            """() => new Promise((done) => requestAnimationFrame(() => requestAnimationFrame(() => {
            const c = document.querySelector(".pane canvas");
            const d = ("""
            + PIXELS
            + """)(c, 0, 0, c.width, c.height);
            let coloured = 0;
            for (let i = 0; i < d.length; i += 4)
              if (Math.max(d[i], d[i+1], d[i+2]) - Math.min(d[i], d[i+1], d[i+2]) > 40) coloured++;
            done(coloured); })))"""
        )

    every = drawn()
    boxes = device_tab.locator(".layer")
    boxes.nth(0).uncheck()
    fewer = drawn()
    for index in range(1, boxes.count()):
        boxes.nth(index).uncheck()
    assert every > fewer > 0
    assert drawn() == 0
    boxes.nth(0).check()
    assert drawn() > 0


def test_masters_move_and_magnify_together_by_keys(device_tab):
    pane = device_tab.locator(".pane").first
    pane.focus()
    pane.press("0")
    pane.press("+")
    pane.press("ArrowUp")
    before = device_tab.locator("#readout").inner_text()
    pane.press("Shift+ArrowRight")
    after = device_tab.locator("#readout").inner_text()
    x = [int(text.split("x ")[1].split(",")[0]) for text in (before, after)]
    assert x[1] - x[0] == 10
    assert device_tab.locator(".viewer.zoomed").count() == 1


def test_the_defect_table_sorts_and_filters(device_tab):
    device_tab.locator("#defect-table th button", has_text="Significance").click()
    header = device_tab.locator("#defect-table th", has_text="Significance")
    assert header.get_attribute("aria-sort") == "descending"
    found = [float(one) for one in texts(device_tab, "#defect-table tbody td:nth-child(6)")]
    assert found == sorted(found, reverse=True)
    device_tab.select_option("#by-kind", label="dead")
    assert set(texts(device_tab, "#defect-table tbody td:first-child")) == {"dead"}
    assert device_tab.locator("#matching").inner_text().startswith("6 of ")
    device_tab.fill("#by-text", "nothing of this name")
    assert device_tab.locator("#defect-table tbody tr").count() == 0


def test_the_device_table_sorts_filters_and_shows_a_number(lot_tab):
    lot_tab.select_option("#by-decision", label="not inspected")
    assert texts(lot_tab, "#device-table td:first-child") == ["CX-9001"]
    assert lot_tab.locator("#device-table a").count() == 0
    lot_tab.select_option("#by-decision", "")
    lot_tab.fill("#by-text", "cx-0012")
    assert lot_tab.locator("#device-table a").get_attribute("href") == "CX-0012/device.html"
    lot_tab.fill("#by-text", "")
    lot_tab.select_option("#also", label="read noise, output left [electron]")
    lot_tab.locator("#device-table th.also button").click()
    found = [float(one) for one in texts(lot_tab, "#device-table td:last-child")]
    assert len(found) == 40
    assert found == sorted(found, reverse=True)


def test_a_moved_limit_gives_the_yield_that_grading_gives(lot_tab):
    results, recipe = lot(150)
    lot_tab.get_by_label("hot pixels, the limit").fill("30")
    shown = int(lot_tab.locator("#move-yield").inner_text().split(" ")[0])
    level = recipe.grades[0]
    moved = replace(
        level,
        limits=tuple(
            replace(one, bound=30) if one.name == "hot_pixels" else one for one in level.limits
        ),
    )
    regraded = [
        grade(one.measurements, one.defects, (), recipe=replace(recipe, grades=(moved,)))
        for one in results
    ]
    assert shown == sum(one.grade == "science" for one in regraded)
    lot_tab.locator("#move-back").click()
    stated = sum(one.graded.grade == "science" for one in results)
    assert lot_tab.locator("#move-yield").inner_text().startswith(f"{stated} of 150 ")


def test_dies_take_the_colour_of_a_quantity_and_lead_to_their_pages(lot_tab):
    die = lot_tab.locator(".die").first
    by_grade = die.locator("rect").evaluate("one => getComputedStyle(one).fill")
    lot_tab.select_option("#wafer-colour", label="read noise, output left [electron]")
    lot_tab.wait_for_selector("#wafers.by-number")
    assert die.locator("rect").evaluate("one => getComputedStyle(one).fill") != by_grade
    assert "electron" in lot_tab.locator("#wafer-scale").inner_text()
    lot_tab.select_option("#wafer-colour", label="grade")
    assert die.locator("rect").evaluate("one => getComputedStyle(one).fill") == by_grade
    assert die.get_attribute("href").endswith("/device.html")


@pytest.mark.parametrize("name", ["device.html", "lot.html"])
@pytest.mark.parametrize("colours", ["light", "dark"])
def test_text_stands_out_from_its_ground(opened, name, colours):
    """Contrast of WCAG 2.1, 1.4.3: at least 4.5 to 1 for the text of the pages."""
    tab = opened(name, colours=colours)
    faint = tab.evaluate(
        """() => {
        const canvas = document.createElement("canvas")
          .getContext("2d", {willReadFrequently: true});
        const rgb = (text) => { canvas.clearRect(0, 0, 1, 1); canvas.fillStyle = text;
          canvas.fillRect(0, 0, 1, 1); return [...canvas.getImageData(0, 0, 1, 1).data]; };
        const light = ([r, g, b]) => { const f = (v) => { v /= 255;
            return v <= 0.04045 ? v / 12.92 : ((v + 0.055) / 1.055) ** 2.4; };
          return 0.2126 * f(r) + 0.7152 * f(g) + 0.0722 * f(b); };
        const ground = (one) => { for (; one; one = one.parentElement) {
            const c = rgb(getComputedStyle(one).backgroundColor); if (c[3] > 0) return c; }
          return [255, 255, 255]; };
        const faint = [];
        for (const one of document.querySelectorAll("body *")) {
          const own = [...one.childNodes].some((n) => n.nodeType === 3 && n.data.trim());
          const apart = one.closest("script, style, button:disabled, title, .die");
          if (!own || apart || !one.checkVisibility()) continue;
          const style = getComputedStyle(one), svg = one.closest("svg");
          const a = light(rgb(svg ? style.fill : style.color)), b = light(ground(svg ?? one));
          const ratio = (Math.max(a, b) + 0.05) / (Math.min(a, b) + 0.05);
          if (ratio < 4.5) faint.push(`${one.tagName}.${one.className} ${ratio.toFixed(2)}`);
        }
        return [...new Set(faint)]; }"""
    )
    assert faint == []


PARTS = ("verdict", "pictures", "defects", "curves", "numbers", "audit", "origin")


@pytest.fixture(scope="module")
def inspected(tmp_path_factory):
    """Folder of one device of the demo, inspected from its frames: every plot of a real page."""
    folder = tmp_path_factory.mktemp("inspected")
    write_demo(demo_lot()[2:3], folder / "frames", seed=0)
    asked = load_recipe(find_recipe("demo"), vocabulary())
    (found,) = find_devices([folder / "frames"], asked)
    made = inspect_device(found, asked, threads=2)
    parts = {"masters": made.masters, "defects": made.defects, "stages": made.stages}
    (folder / "device.html").write_text(device_page(made.result, **parts, recipe=asked))
    crowded = replace(
        made.result,
        findings=made.result.findings * 8,
        graded=replace(made.result.graded, limits=made.result.graded.limits * 3),
    )
    (folder / "crowded.html").write_text(device_page(crowded, **parts, recipe=asked))
    return folder


@pytest.mark.parametrize("name", ["device.html", "crowded.html"])
def test_a_device_page_prints_to_one_sheet_of_a4_for_each_part(browser, inspected, name, tmp_path):
    page = browser.new_page()
    page.goto((inspected / name).as_uri())
    page.wait_for_selector("#viewer[data-ready]")
    assert page.evaluate("[...document.querySelectorAll('main > section')].map(s => s.id)") == [
        *PARTS
    ]
    page.pdf(path=tmp_path / "device.pdf", format="A4", print_background=True)
    page.close()
    sheets = (tmp_path / "device.pdf").read_bytes().count(b"/Type /Page\n")
    assert sheets == len(PARTS)


@pytest.mark.parametrize("name", ["device.html", "lot.html"])
@pytest.mark.parametrize("width", [WIDTHS[0], WIDTHS[-1]])
def test_axe_core_finds_nothing_serious(opened, name, width):
    """The rules of axe-core (Deque Systems, MPL-2.0), those for WCAG 2.1 AA among them."""
    axe = pytest.importorskip("axe_playwright_python.sync_playwright")
    ready = "#viewer[data-ready]" if name == "device.html" else "#mover[data-ready]"
    tab = opened(name, width=width, ready=ready)
    found = axe.Axe().run(tab).response
    assert len(found["passes"]) > 20
    assert [
        (one["id"], one["impact"], [node["target"] for node in one["nodes"]][:5])
        for one in found["violations"]
        if one["impact"] in ("serious", "critical")
    ] == []


def test_the_grade_shown_is_that_of_the_result(device_tab, sample):
    stored = json.loads(result_json(sample.result))["grade"]
    assert device_tab.locator("#grade").inner_text() == (stored["grade"] or "no grade met")
    assert device_tab.locator("#decision").inner_text() == VERDICTS[stored["decision"]]
    assert device_tab.locator("#reason").inner_text() == stored["reasons"][0]


@pytest.mark.parametrize(
    "text", ["<img src=x onerror=alert(1)>", "</title><script>alert(1)</script>"]
)
def test_a_hostile_serial_number_runs_nothing_in_a_browser(opened, files, sample, text):
    hostile = replace(sample.result, serial=text, lot=text, wafer=text)
    (files / "hostile.html").write_text(device_page(hostile, **sample.parts))
    tab = opened("hostile.html", ready="#viewer[data-ready]")
    assert tab.locator("h1").inner_text() == text
    assert tab.title().startswith(text)
    assert tab.locator("img").count() == 3


def test_every_picture_has_words(device_tab):
    assert all(device_tab.locator("img").nth(i).get_attribute("alt") for i in range(3))
    assert (
        device_tab.evaluate(
            """() => [...document.querySelectorAll("svg.plot")].every((one) =>
            one.getAttribute("role") === "img" && one.querySelector("title").textContent)"""
        )
        is True
    )


@pytest.mark.nightly
def test_a_sensor_of_sixteen_million_pixels_opens_soon_and_pans_smoothly(opened, files):
    large = device(shape=(4096, 4096), hot=3000)
    (files / "large.html").write_text(device_page(large.result, **large.parts))
    tab = opened("large.html", ready="#viewer[data-ready]")
    ready = tab.evaluate("performance.now()")
    assert ready < 5000  # ms
    tab.locator("#defect-table button.go").first.click()
    mean = tab.evaluate(
        """() => new Promise((done) => { let left = 60; const start = performance.now();
        const pane = document.querySelector(".pane");
        const step = () => { if (left-- === 0) return done((performance.now() - start) / 60);
          pane.dispatchEvent(new KeyboardEvent("keydown", { key: "ArrowRight" }));
          requestAnimationFrame(step); };
        step(); })"""
    )
    assert mean < 50  # ms from frame to frame, without a graphics processor
