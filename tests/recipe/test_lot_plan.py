import pytest

from recipe.vocabulary_for_tests import VOCABULARY
from sensorgrade.errors import RecipeError
from sensorgrade.recipe.load import parse_recipe
from sensorgrade.recipe.model import LotPlan

HEAD = "name: test\nsensor: {technology: ccd, pixel_pitch: 15 um}\n"


def lot(text):
    return parse_recipe(HEAD + text, VOCABULARY, path="recipe.yaml").lot


def test_a_recipe_may_leave_the_lot_unjudged():
    assert lot("") == LotPlan()


def test_a_sample_with_its_acceptance_number_or_a_quality_limit():
    assert lot("lot: {sample_size: 50, acceptance_number: 1}") == LotPlan(
        sample_size=50, acceptance_number=1
    )
    assert lot("lot: {quality_limit: 1 %}").quality_limit == 1.0


@pytest.mark.parametrize(
    "text", ["{sample_size: 50}", "{sample_size: 50, acceptance_number: 1, quality_limit: 1 %}"]
)
def test_half_a_plan_or_two_plans_are_refused(text):
    with pytest.raises(RecipeError, match="sample_size with acceptance_number, or quality_limit"):
        lot(f"lot: {text}")
