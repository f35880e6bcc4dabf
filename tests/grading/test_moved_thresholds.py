"""Thresholds on pixels moved afterwards: counts and grades are those of an inspection at them."""

import shutil
import sqlite3
from contextlib import closing
from dataclasses import replace

import pytest

from defects.test_defects import PLAN
from defects.test_recount import sensor
from sensorgrade.errors import RecipeError, RequestError
from sensorgrade.inspection import inspect_device
from sensorgrade.lot.fingerprint import Fingerprint
from sensorgrade.lot.ledger import write_ledger
from sensorgrade.lot.recounting import moved_text
from sensorgrade.lot.regrade import regrade
from sensorgrade.recipe.load import parse_recipe
from sensorgrade.simulate.device import simulate_device
from sensorgrade.stages import vocabulary

RECIPE = """\
name: thresholds
sensor:
  technology: cmos
  pixel_pitch: 10 um
  outputs:
    left: {image: "[1:128,1:256]"}
    right: {image: "[129:256,1:256]"}
stages:
  photon_transfer: {}
  pixels: {hot: 5 electron/s}
  lines: {}
  clusters: {}
zones:
  centre: {circle: [128, 128, 60]}
decision: {kind: non-binary}
grades:
  fine:
    hot_pixels: [<= 40, {limit: "<= 6", zone: centre}]
    dim_pixels: <= 40
    clusters: <= 1
  coarse:
    hot_pixels: <= 90
"""


def frames(number):
    return simulate_device(sensor(number), PLAN, seed=number, serial=f"T{number}").frames


def at(text):
    return parse_recipe(text, vocabulary(), path="recipe.yaml")


@pytest.fixture(scope="module")
def run(tmp_path_factory):
    folder = tmp_path_factory.mktemp("run")
    recipe = at(RECIPE)
    with write_ledger(folder) as ledger:
        ledger.begin(recipe, jobs=1, threads=1)
        for number in (1, 2, 3):
            made = inspect_device(frames(number), recipe, threads=1)
            ledger.record(made.result, fingerprint=Fingerprint("", ""), seconds=1.0)
    return folder


def graded_again(run, tmp_path, text):
    path = tmp_path / "limits.yaml"
    path.write_text(text)
    return regrade(run, limits=path, vocabulary=vocabulary())


@pytest.mark.parametrize("pixels", ["hot: 3 electron/s", "hot: 8 electron/s", "dim: 88 %"])
def test_grades_and_counts_are_those_of_an_inspection_at_the_thresholds(run, tmp_path, pixels):
    found = graded_again(run, tmp_path, f"stages: {{pixels: {{{pixels}}}}}\n")
    key = pixels.partition(":")[0]
    kept = "" if key == "hot" else "hot: 5 electron/s, "
    recipe = at(RECIPE.replace("pixels: {hot: 5 electron/s}", f"pixels: {{{kept}{pixels}}}"))
    assert found.moved == (key,)
    assert moved_text(recipe, found.moved) == (pixels.replace(":", ""),)
    for number, device, now in zip((1, 2, 3), found.devices, found.graded, strict=True):
        made = inspect_device(frames(number), recipe, threads=1).result
        assert (now.grade, now.decision) == (made.graded.grade, made.graded.decision)
        assert now.reasons == made.graded.reasons
        asked = {limit.name for level in recipe.grades for limit in level.limits}
        for one in made.defects:
            if one.kind in asked:
                (other,) = (c for c in device.counts if (c.kind, c.scope) == (one.kind, one.scope))
                assert other.found == one.found
                assert other.expected == pytest.approx(one.expected, abs=1e-9)


def test_a_whole_recipe_moves_them_as_well(run, tmp_path):
    text = "stages: {pixels: {hot: 3 electron/s}}\n"
    alone = graded_again(run, tmp_path, text)
    whole = graded_again(run, tmp_path, RECIPE.replace("hot: 5", "hot: 3"))
    assert whole.devices == alone.devices
    assert whole.moved == ("hot",)


def test_new_limits_may_come_with_new_thresholds(run, tmp_path):
    text = "stages: {pixels: {hot: 3 electron/s, warm: 2 electron/s}}\ngrades: {a: {warm_pixels: "
    found = graded_again(run, tmp_path, text + "<= 500}}\n")
    assert [one.grade for one in found.graded] == ["a", "a", "a"]
    counts = [one for one in found.devices[0].counts if one.kind == "warm_pixels"]
    assert {one.scope for one in counts} >= {"device", "output left", "zone centre"}
    assert counts[0].found > 10


def test_a_threshold_below_what_was_kept_leaves_the_device_undecided_and_says_why(run, tmp_path):
    found = graded_again(run, tmp_path, "stages: {pixels: {hot: 1 electron/s}}\n")
    assert {one.decision for one in found.graded} == {"undecided"}
    (reason,) = (one for one in found.graded[0].reasons if one.startswith("Hot pixels:"))
    assert "hot from 1 electron/s on needs the frames" in reason
    assert "they were kept down to 1.25 (" in reason


@pytest.mark.parametrize(
    "text, sentence",
    [
        (
            "stages: {pixels: {noisy: 4}}",
            "stages.pixels.noisy: needs the frames, inspect again; without them hot, warm, dead",
        ),
        ("stages: {pixels: {hott: 4}}", "no such key; nearest is hot"),
        ("stages: {telegraph: {}}", "stages.telegraph: was not inspected"),
    ],
)
def test_what_cannot_move_is_named_with_its_line(run, tmp_path, text, sentence):
    with pytest.raises(RecipeError, match=r"limits\.yaml:1") as caught:
        graded_again(run, tmp_path, text)
    assert sentence in str(caught.value)


def test_a_whole_recipe_that_needs_frames_is_refused(run, tmp_path):
    text = RECIPE.replace("hot: 5 electron/s", "hot: 5 electron/s, significance: 7")
    with pytest.raises(RequestError, match=r"stages.pixels.significance: the run had 5.5"):
        graded_again(run, tmp_path, text)


def test_devices_whose_pixels_were_not_kept_are_undecided(run, tmp_path):
    recipe = at(RECIPE)
    result = inspect_device(frames(1), recipe, threads=1).result
    with write_ledger(tmp_path) as ledger:
        ledger.begin(recipe, jobs=1, threads=1)
        ledger.record(
            replace(result, candidates=None), fingerprint=Fingerprint("", ""), seconds=1.0
        )
    found = graded_again(tmp_path, tmp_path, "stages: {pixels: {hot: 3 electron/s}}\n")
    assert found.graded[0].decision == "undecided"
    assert "its pixels were not kept" in found.graded[0].reasons[0]


def test_a_damaged_row_is_told_in_a_sentence(run, tmp_path):
    shutil.copy(run / "lot.sqlite", tmp_path)
    with closing(sqlite3.connect(tmp_path / "lot.sqlite")) as connection:
        connection.execute("UPDATE candidates SET arrays = substr(arrays, 1, 40)")
        connection.commit()
    with pytest.raises(RequestError, match=r"candidates is damaged .* inspect that device again"):
        graded_again(tmp_path, tmp_path, "stages: {pixels: {hot: 3 electron/s}}\n")
    text = "grades: {a: {hot_pixels: <= 500}}\n"
    assert len(graded_again(tmp_path, tmp_path, text).graded) == 3
