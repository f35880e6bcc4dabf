"""A lot's page: its numbers are the lot's."""

import base64
import json
import re
import zlib
from dataclasses import replace

import numpy as np
import pytest

from report.sample import lot
from sensorgrade.lot.failure import Failure
from sensorgrade.recipe.model import LotPlan
from sensorgrade.report.lot_data import lot_data
from sensorgrade.report.lot_page import lot_page
from sensorgrade.report.lot_plots import course, distribution
from sensorgrade.report.lot_values import LotQuantity, Place

BROKEN = Failure("CX-9001", "CX-9001", "lot 7", "W00", 0, 0, "no usable frames")


@pytest.fixture(scope="module")
def made():
    results, recipe = lot(150)
    return results, recipe, lot_data(results, failures=[BROKEN], recipe=recipe, name="lot 7")


def numbers(text, dtype):
    return np.frombuffer(zlib.decompress(base64.b64decode(text)), dtype)


def test_the_yield_counts_accepted_of_inspected_devices(made):
    results, _, page = made
    assert page.accepted == sum(one.graded.decision == "accept" for one in results)
    assert page.inspected == 150
    assert page.devices == 151
    assert 0 < page.accepted < 150


def test_the_pieces_of_the_lot_add_up_to_all_devices(made):
    results, _, page = made
    assert sum(one.devices for one in page.shares) == 151
    by_grade = {one.label: one.devices for one in page.shares}
    assert by_grade["science"] == sum(one.graded.grade == "science" for one in results)
    assert by_grade["not inspected"] == 1


def test_what_if_starts_from_the_devices_that_meet_the_grade(made):
    results, recipe, page = made
    moved = page.data["whatIf"]
    assert moved["devices"] == 150
    for grade, level in zip(moved["grades"], recipe.grades, strict=True):
        meets = np.ones(150, dtype=bool)
        for one in grade["limits"]:
            bounds = numbers(moved["bounds"][one["row"]], "<f8")
            meets &= bounds <= one["bound"] if one["upward"] else bounds >= one["bound"]
        expected = [
            all(
                limit.outcome == "accept"
                for limit in one.graded.limits
                if limit.grade == level.name
            )
            for one in results
        ]
        assert meets.tolist() == expected


def test_grades_that_differ_in_bounds_only_share_their_numbers(made):
    _, recipe, page = made
    assert len(page.data["whatIf"]["bounds"]) == len(recipe.grades[0].limits)


def test_the_ranking_counts_devices_that_miss_each_limit(made):
    results, _, page = made
    science = page.costs[0]
    row = next(one for one in science.rows if one.name == "hot pixels")
    missed = sum(
        any(
            limit.outcome != "accept"
            for limit in one.graded.limits
            if limit.grade == "science" and limit.limit.name == "hot_pixels"
        )
        for one in results
    )
    assert row.missed == missed
    assert [one.missed for one in science.rows] == sorted(
        (one.missed for one in science.rows), reverse=True
    )


def test_the_numbers_of_every_device_are_in_the_page(made):
    results, _, page = made
    quantities = page.data["devices"]["quantities"]
    noise = next(
        one for one in quantities if (one["name"], one["scope"]) == ("read noise", "output left")
    )
    expected = [
        next(
            m.value for m in one.measurements if (m.name, m.scope) == ("read_noise", "output left")
        )
        for one in results
    ]
    assert numbers(noise["values"], "<f4") == pytest.approx(expected, rel=1e-6)


def test_every_die_is_drawn_and_leads_to_its_page(made):
    results, _, page = made
    drawn = "".join(one.drawing for one in page.wafers)
    assert drawn.count('class="die ') == 151
    assert set(re.findall(r'href="([^"]+)"', drawn)) == {
        f"{one.folder}/device.html" for one in results
    }


def test_a_folder_name_is_written_as_an_address():
    results, recipe = lot(2)
    odd = [replace(results[0], folder="a b#c?d%e"), results[1]]
    assert 'href="a%20b%23c%3Fd%25e/device.html"' in lot_page(
        odd, failures=[], recipe=recipe, name="x"
    )


def test_a_lot_of_failures_alone_has_a_page():
    _, recipe = lot(2)
    text = lot_page([], failures=[BROKEN], recipe=recipe, name="x")
    assert "No device was inspected." in text
    assert "no usable frames" in text


def test_a_recipe_without_grades_has_a_page():
    results, recipe = lot(12)
    text = lot_page(results, failures=[], recipe=replace(recipe, grades=()), name="x")
    assert 'id="what-if"' not in text


def test_a_sampling_plan_decides_the_lot():
    results, recipe = lot(60)
    page = lot_data(
        results,
        failures=[],
        recipe=replace(recipe, lot=LotPlan(sample_size=10, acceptance_number=0)),
        name="x",
    )
    assert page.outcome in {"accept", "reject", "undecided"}
    assert "10 devices judged" in page.lot_sentence


def test_a_distribution_counts_every_device_once():
    values = np.random.default_rng(3).normal(5, 0.2, 400)
    values[0] = 90.0  # past the end of the axis, counted in the last bin
    quantity = LotQuantity("read_noise", "electron", False, (Place("device", values),))
    plot = distribution(quantity, (), key="k")
    assert plot.series[0].y.sum() == 400
    assert plot.x.high < 10
    assert "1 lie past" in plot.caption or "past the ends" in plot.caption


def test_bins_of_counts_hold_whole_numbers():
    counts = np.arange(5.0).repeat(10)
    quantity = LotQuantity("clusters", "", True, (Place("device", counts),))
    plot = distribution(quantity, (), key="k")
    assert np.allclose(plot.series[0].x % 1, 0.5)
    assert plot.series[0].y.tolist()[:5] == [10] * 5


def test_drift_is_told_with_its_doubt_and_only_where_there_is_one():
    rng = np.random.default_rng(8)
    taken = np.arange(400.0) * 600
    level = rng.normal(5, 0.1, 400)
    for slope, drifts in ((0.0, False), (0.3, True)):
        values = level + slope * np.arange(400) / 400
        quantity = LotQuantity("read_noise", "electron", False, (Place("device", values),))
        plot = course(quantity, (), taken=taken, key="k")
        assert ("No drift beyond chance" not in plot.caption) is drifts
    # medians of the outer quarters lie three quarters of the lot apart: 0.75 * 0.3
    found = float(re.search(r"\+([\d.]+) ±", plot.caption)[1])
    assert found == pytest.approx(0.225, abs=5 * 0.0177)  # 1.2533 * 0.1 * sqrt(2 / 100)


def test_devices_taken_at_one_time_have_no_course():
    quantity = LotQuantity("read_noise", "electron", False, (Place("device", np.ones(9)),))
    assert course(quantity, (), taken=np.full(9, 5.0), key="k") is None


def test_the_data_is_json_that_any_reader_takes(made):
    json.loads(json.dumps(made[2].data, allow_nan=False))


def test_wafers_stand_in_the_order_of_their_numbers():
    results, recipe = lot(3)
    wafers = ("W10", "W9", "W100")
    results = [replace(one, wafer=name) for one, name in zip(results, wafers, strict=True)]
    page = lot_data(results, failures=[], recipe=recipe, name="lot 7")
    assert [one.wafer for one in page.wafers] == ["W9", "W10", "W100"]
    assert [one.part for one in page.wafer_parts] == ["W9", "W10", "W100"]
    assert dict(page.facts)["Wafers"] == "W9, W10, W100"
