"""The schema says what the reader says, so far as one value can be judged where it stands."""

import jsonschema
import pytest
import yaml

from recipe.test_load import RECIPE
from recipe.vocabulary_for_tests import VOCABULARY
from sensorgrade.errors import RecipeError
from sensorgrade.recipe.load import parse_recipe
from sensorgrade.recipe.schema import json_schema

HEAD = "name: a\nsensor: {technology: ccd, pixel_pitch: 9 um}\n"


@pytest.fixture(scope="module")
def validator():
    schema = json_schema(VOCABULARY)
    jsonschema.Draft202012Validator.check_schema(schema)
    return jsonschema.Draft202012Validator(schema)


def test_a_right_recipe_validates(validator):
    text = RECIPE.replace("7: ignore", '"7": ignore')  # JSON's keys are always text
    assert list(validator.iter_errors(yaml.safe_load(text))) == []


WRONG = [
    "sensr: 3",
    "frames: {sorted_by: heder}",
    "frames: {raw: {dtype: uint16, rows: 10}}",
    "frames: {kinds: {LIGHT: falt}}",
    "frames: {exposure_tolerance: 0.5}",
    "stages: {read_nois: {}}",
    "stages: {read_noise: {pairs: ten}}",
    "stages: {read_noise: {pairs: 0}}",
    "stages: {read_noise: {pairs: 1.5}}",
    "stages: {hot_pixels: {threshold: 5}}",
    "stages: {hot_pixels: {merge: 3}}",
    "stages: {hot_pixels: {method: mode}}",
    "stages: {hot_pixels: {span: [1, 2, 3]}}",
    "stages: {hot_pixels: {inner: {}}}",
    "stages: {hot_pixels: {area: '1:2,3:4'}}",
    "zones: {c: {border: 0}}",
    "decision: {kind: strict}",
    "grades: {a: {read_nose: <= 5 electron}}",
    "grades: {a: {read_noise: 5 electron}}",
    "grades: {a: {read_noise: <= 5}}",
    "stages: {hot_pixels: }\ngrades: {a: {hot_pixels: <= 5 DN}}",
    "grades: {a: }",
    "grades: {a: {read_noise: {limit: '<= 5 electron', of: any}}}",
    "grades: {a: {read_noise: {of: worst}}}",
]


@pytest.mark.parametrize("part", WRONG)
def test_what_is_wrong_for_the_reader_is_wrong_for_the_schema(validator, part):
    with pytest.raises(RecipeError):
        parse_recipe(HEAD + part, VOCABULARY, path="r.yaml")
    assert list(validator.iter_errors(yaml.safe_load(HEAD + part)))


def test_every_key_is_explained():
    def walk(schema, where):
        for name, part in schema.get("properties", {}).items():
            if "$ref" not in part and where != "stages":
                assert part.get("description"), (where, name)
            walk(part, name)

    walk(json_schema(VOCABULARY), "")


def test_a_unit_and_a_default_stand_in_the_description():
    stages = json_schema(VOCABULARY)["properties"]["stages"]["properties"]
    threshold = stages["hot_pixels"]["properties"]["threshold"]["description"]
    assert threshold == "Dark current above this [electron/s]. Default: 5 electron/s"
