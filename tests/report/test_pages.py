"""The pages: they hold what the results say, nothing comes in or goes out, nothing is run."""

import json
import re
from dataclasses import fields, replace
from html.parser import HTMLParser

import pytest
from jinja2 import meta

from report.sample import device, lot
from sensorgrade.lot.failure import Failure
from sensorgrade.report.device_data import DevicePage, device_data
from sensorgrade.report.device_page import device_page
from sensorgrade.report.lot_data import LotPage
from sensorgrade.report.lot_page import lot_page
from sensorgrade.report.page import environment
from sensorgrade.report.scale import Scale

HOSTILE = (
    "<script>alert(1)</script>",
    "</script><script>alert(1)</script>",
    '"><img src=x onerror=alert(1)>',
    "' onmouseover='alert(1)",
    "<!--",
    "{{ 7 * 7 }}",
    "javascript:alert(1)",
)


class Parsed(HTMLParser):
    """Elements with their attributes, and the text of elements by id."""

    VOID = frozenset({"meta", "img", "input", "br", "link"})

    def __init__(self, text):
        super().__init__()
        self.elements = []
        self.texts = {}
        self.open = []
        self.feed(text)

    def handle_starttag(self, tag, attributes):
        known = dict(attributes)
        self.elements.append((tag, known))
        if tag not in self.VOID:
            self.open.append(known.get("id"))

    def handle_startendtag(self, tag, attributes):
        self.elements.append((tag, dict(attributes)))

    def handle_endtag(self, tag):
        self.open.pop()

    def handle_data(self, data):
        for name in self.open:
            if name:
                self.texts[name] = self.texts.get(name, "") + data


@pytest.fixture(scope="module")
def sample():
    return device()


@pytest.fixture(scope="module")
def page(sample):
    return device_page(sample.result, **sample.parts)


@pytest.mark.parametrize(("template", "kind"), [("device.html", DevicePage), ("lot.html", LotPage)])
def test_a_template_uses_every_field_of_its_page_and_no_other_name(template, kind):
    source, _, _ = environment().loader.get_source(environment(), template)
    used = meta.find_undeclared_variables(environment().parse(source))
    assert used == {one.name for one in fields(kind)}


@pytest.mark.parametrize("kind", [DevicePage, LotPage])
def test_every_field_of_a_page_says_what_it_holds(kind):
    assert all(one.metadata["sentence"].endswith(".") for one in fields(kind))


@pytest.mark.parametrize(
    ("grade", "decision", "words"),
    [
        ("science", "accept", ("Accepted", "science")),
        (None, "reject", ("Rejected", "no grade met")),
        (None, "undecided", ("Undecided", "no grade met")),
        (None, "ungraded", ("Not graded", "no grade met")),
    ],
)
def test_the_grade_and_reason_on_top_are_those_of_the_result(sample, grade, decision, words):
    graded = replace(sample.result.graded, grade=grade, decision=decision)
    text = device_page(replace(sample.result, graded=graded), **sample.parts)
    parsed = Parsed(text)
    assert (parsed.texts["decision"], parsed.texts["grade"]) == words
    assert parsed.texts["reason"].strip() == graded.reasons[0]
    assert f'<div class="sheet verdict {decision}">' in text


def test_every_limit_stands_on_the_page_with_its_outcome(sample, page):
    expected = [one.outcome for one in sample.result.graded.limits]
    shown = re.findall(r'<li class="(accept|reject|undecided)">', page)
    assert sorted(shown) == sorted(expected)


def test_a_bar_stands_where_the_margin_says(sample):
    data = device_data(sample.result, **sample.parts)
    bars = {(b.name, b.place): b for group in data.limit_groups for b in group.bars}
    # dark current 0.0131 against 0.02 (science): 34.5 % of the limit is left, the scale runs from
    # 100 % left over the limit at two thirds to 50 % past it.
    science = next(
        one
        for one in sample.result.graded.limits
        if one.grade == "science" and one.limit.name == "dark_current"
    )
    left = (0.02 - science.value) / 0.02
    bar = next(
        b
        for group in data.limit_groups
        if group.grade == "science"
        for b in group.bars
        if b.name == "dark current" and b.place == science.scope
    )
    assert bar.at == pytest.approx(100 * (1 - left) / 1.5, abs=0.01)
    assert len(bars) > 5


def test_every_measurement_is_printed_with_its_doubt(page):
    assert "0.0031 electron/DN" in page
    assert "(3.10 ± 0.44) × 10⁻⁶" in page


@pytest.mark.parametrize("text", HOSTILE)
def test_hostile_text_from_frames_stays_text(sample, text):
    finding = replace(sample.result.findings[0], where=text, seen=text, remedy=text)
    result = replace(
        sample.result,
        serial=text,
        lot=text,
        wafer=text,
        findings=(finding,),
        not_measured={"lag": text},
    )
    parsed = Parsed(device_page(result, **sample.parts))
    assert_harmless(parsed)
    assert text in dict(_pairs(parsed.texts["verdict"], text))


@pytest.mark.parametrize("text", HOSTILE)
def test_hostile_text_stays_text_on_a_lot_page(text):
    made = lot(6)
    results = [replace(one, serial=text, folder=text, lot=text, wafer=text) for one in made[0]]
    failed = Failure(text, text, text, text, 0, 0, text)
    parsed = Parsed(lot_page(results, failures=[failed], recipe=made[1], name=text))
    assert_harmless(parsed)
    for tag, known in parsed.elements:
        if tag == "a":
            assert known.get("href", "#").startswith("#") or known["href"].endswith("/device.html")
            assert ":" not in known.get("href", "")


def assert_harmless(parsed):
    """Two scripts (data and program), no handler, no address but into the page or beside it."""
    assert [tag for tag, _ in parsed.elements].count("script") == 2
    assert not any(name.startswith("on") for _, known in parsed.elements for name in known)
    assert all(known["src"].startswith("data:") for tag, known in parsed.elements if "src" in known)
    json.loads(parsed.texts["data"])


def _pairs(whole, text):
    return [(text, True)] if text in whole else []


@pytest.mark.parametrize("which", ["device", "lot"])
def test_a_page_names_no_address_of_the_network(page, which):
    if which == "lot":
        results, recipe = lot(12)
        page = lot_page(results, failures=[], recipe=recipe, name="lot 7")
    addresses = set(re.findall(r"(?:https?:)?//[\w.]+\.\w+", page))
    assert addresses <= {"http://www.w3.org"}  # the name of SVG in the script, never loaded
    policy = next(known["content"] for tag, known in Parsed(page).elements if "http-equiv" in known)
    assert policy.startswith("default-src 'none'; img-src data:;")
    assert "@import" not in page
    assert "url(" not in page


def test_the_same_results_give_the_same_page(sample, page):
    assert device_page(sample.result, **sample.parts) == page


def test_a_page_of_sixteen_million_pixels_is_small():
    large = device(shape=(4096, 4096), hot=3000)
    assert len(device_page(large.result, **large.parts).encode()) < 6 * 2**20


def test_a_device_without_masters_and_defects_has_a_page(sample):
    parts = sample.parts
    masters = replace(parts["masters"], bias=None, dark=None, flat=None)
    none = replace(
        parts["defects"], table=parts["defects"].table[:0], counts=(), mask=parts["defects"].mask
    )
    text = device_page(
        replace(sample.result, defects=(), taken=None, lot=None),
        **(parts | {"masters": masters, "defects": none}),
    )
    assert "No defect was found." in text
    assert "There is no master dark" in text


@pytest.mark.parametrize(
    ("low", "high", "label", "shown", "texts"),
    [
        (0.84e-6, 1.12e-6, "CTI [1]", "CTI [10⁻⁶]", ("0.9", "1.0", "1.1")),
        (0, 240e3, "signal [electron]", "signal [10³ electron]", ("0", "100", "200")),
        (0, 60, "light [s]", "light [s]", ("0", "20", "40", "60")),
        (0, 3e6, "pixels", "pixels [10⁶]", ("0", "1", "2", "3")),
    ],
)
def test_the_power_of_ten_of_an_axis_stands_once_in_its_label(low, high, label, shown, texts):
    axis = Scale(low, high, log=False)
    assert axis.label(label, 4) == shown
    assert tuple(text for _, text in axis.ticks(4)) == texts


@pytest.mark.parametrize("high", [1.6, 2.5, 4, 9.9, 80])
def test_a_short_logarithmic_axis_has_three_ticks_at_their_places(high):
    ticks = Scale(1.05, high, log=True).ticks(6)
    assert len(ticks) >= 3
    assert all(float(text) == pytest.approx(value) for value, text in ticks)
