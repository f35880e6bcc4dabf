"""Recipes that state only how frames are told apart."""

from typing import Any

from sensorgrade.recipe.model import DecisionRule, FrameRules, OutputOptions, Recipe, Sensor


def recipe_with(outputs: dict[str, OutputOptions] | None = None, **rules: Any) -> Recipe:
    """A recipe without stages or grades, with these frame rules."""
    return Recipe(
        name="test",
        sensor=Sensor(technology="ccd", pixel_pitch=15.0, outputs=outputs or {}),
        frames=FrameRules(**rules),
        stages={},
        zones={},
        decision=DecisionRule(),
        grades=(),
        path="recipe.yaml",
        text="",
        sha256="",
    )
