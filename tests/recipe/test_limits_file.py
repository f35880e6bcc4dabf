"""A file of limits alone changes the grades of a recipe and nothing else."""

from dataclasses import replace

import pytest

from recipe.test_load import RECIPE
from recipe.vocabulary_for_tests import VOCABULARY
from sensorgrade.errors import RecipeError
from sensorgrade.recipe.load import load_limits, parse_limits, parse_recipe
from sensorgrade.recipe.model import Limit, LotPlan


@pytest.fixture(scope="module")
def recipe():
    return parse_recipe(RECIPE, VOCABULARY, path="a.yaml")


def test_grades_alone_replace_the_recipe_s(recipe, tmp_path):
    path = tmp_path / "tight.yaml"
    path.write_text("grades:\n  best: {read_noise: <= 2 electron}\nlot: {quality_limit: 1 %}\n")
    found = load_limits(path, VOCABULARY, recipe=recipe)
    assert found.grades[0].limits == (Limit("read_noise", "<=", 2.0, "electron", 2),)
    assert found.lot == LotPlan(quality_limit=1.0)
    same = replace(
        recipe,
        grades=found.grades,
        lot=found.lot,
        path=str(path),
        text=found.text,
        sha256=found.sha256,
    )
    assert found == same and found.decision == recipe.decision


def test_a_whole_recipe_serves_as_well(recipe):
    other = RECIPE.replace("<= 5 electron", "<= 3 electron")
    expected = parse_recipe(other, VOCABULARY, path="b.yaml")
    assert parse_limits(other, VOCABULARY, recipe=recipe, path="b.yaml") == expected


def test_a_threshold_alone_moves_and_leaves_the_rest(recipe):
    text = "stages: {hot_pixels: {threshold: 3 electron/s}}"
    found = parse_limits(text, VOCABULARY, recipe=recipe, path="b")
    assert found.stages["hot_pixels"] == replace(recipe.stages["hot_pixels"], threshold=3.0)
    assert found.grades == recipe.grades
    assert found.stages["read_noise"] == recipe.stages["read_noise"]


def test_limits_refer_to_the_zones_and_outputs_of_the_recipe(recipe):
    text = 'grades: {a: {read_noise: {limit: "<= 2 electron", zone: centre, output: left}}}'
    (limit,) = parse_limits(text, VOCABULARY, recipe=recipe, path="b").grades[0].limits
    assert (limit.zone, limit.scope) == ("centre", "output left")


@pytest.mark.parametrize(
    "text, sentences",
    [
        (
            "decision: {kind: simple}",
            ["b:1  grades is missing (Limits for each grade, best first; a device takes the first"
             " whose limits it meets)"],
        ),
        (
            "grades: {a: {dead_pixels: <= 3}}\nzones: {}",
            ["b:1  grades.a.dead_pixels: nothing in this recipe measures it; put flat_pixels or"
             " dark_pixels under stages",
             "b:2  zones: a file of limits holds grades, decision, lot or stages; a whole recipe"
             " starts with name and sensor"],
        ),
        (
            "stages: {read_noise: {pairs: 3}, hot_pixels: {threshold: 3 electron/s, gain: 2}}",
            ["b:1  stages.read_noise.pairs: needs the frames, inspect again",
             "b:1  stages.hot_pixels.gain: needs the frames, inspect again; without them threshold"
             " can move"],
        ),
    ],
)  # fmt: skip
def test_mistakes_are_told_as_in_recipes(recipe, text, sentences):
    with pytest.raises(RecipeError) as caught:
        parse_limits(text, VOCABULARY, recipe=recipe, path="b")
    assert list(caught.value.problems) == sentences
