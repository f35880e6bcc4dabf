"""Right recipes: what is written is what the Recipe holds."""

import hashlib
from pathlib import Path

import pytest

from recipe.vocabulary_for_tests import VOCABULARY, HotPixels, Inner, ReadNoise
from sensorgrade.errors import RecipeError
from sensorgrade.recipe.document import LONGEST
from sensorgrade.recipe.load import load_options, load_recipe, parse_recipe, recipe_title
from sensorgrade.recipe.model import DecisionRule, FrameRules, Limit, Section
from sensorgrade.recipe.quantities import example, quantity

RECIPE = """\
name: two-output CCD
sensor:
  technology: ccd
  pixel_pitch: 0.015 mm
  outputs:
    left:  {image: "[1:512,1:1024]", overscan: "[1025:1056,1:1024]"}
    right: {image: "[513:1024,1:1024]", overscan: "[1057:1088,1:1024]"}
  colour: RGGB
  adc_bits: 16
frames:
  serial: SERIAL
  kinds: {LIGHT: flat, 7: ignore}
stages:
  hot_pixels:
    threshold: 7.2 electron/s
    temperature: 263.15 K
    merge: false
    steps: [10 s, 1 min, 100 ms]
    area: "[1:10, 2:20]"
    inner: {width: 3}
    inners: {a: {width: 1}, b: {width: 2}}
    words: {x: 1, y: 25.0}
  read_noise:
zones:
  centre: {circle: [512, 512, 200]}
  edge: {border: 8}
decision: {kind: guarded acceptance, confidence: 99 %}
grades:
  science:
    read_noise: <= 5 electron
    conversion_gain: 1.8 .. 2200e-3 electron/DN
    hot_pixels: ≤ 100
    dynamic_range: ">= 66 dB"
  engineering:
    read_noise:
      - <= 8 electron
      - {limit: "<= 9 electron", output: left, colour: red, wavelength: 550 nm, at: -10 degC,
         rule: simple, of: worst, zone: centre}
  sample: {}
"""


@pytest.fixture(scope="module")
def recipe():
    return parse_recipe(RECIPE, VOCABULARY, path="a.yaml")


def test_quantities_are_in_the_declared_units(recipe):
    assert recipe.sensor.pixel_pitch == 15.0
    assert recipe.decision == DecisionRule(kind="guarded acceptance", confidence=99.0)


def test_sections_are_half_open_with_rows_first(recipe):
    assert recipe.sensor.outputs["right"].image == Section(0, 1024, 512, 1024)
    assert recipe.sensor.outputs["left"].overscan.shape == (1024, 32)


def test_every_kind_of_option_is_read(recipe):
    assert recipe.stages["hot_pixels"] == HotPixels(
        threshold=7.2,
        temperature=-10.0,
        merge=False,
        steps=(10.0, 60.0, 0.1),
        area=Section(1, 20, 0, 10),
        inner=Inner(width=3),
        inners={"a": Inner(width=1), "b": Inner(width=2)},
        words={"x": 1.0, "y": 25.0},
    )


def test_a_stage_without_options_runs_with_its_defaults(recipe):
    assert recipe.stages["read_noise"] == ReadNoise()
    empty = RECIPE.replace("read_noise:\nzones", "read_noise: {}\nzones")
    assert parse_recipe(empty, VOCABULARY, path="a.yaml").stages == recipe.stages


def test_stages_stand_in_the_order_they_run_in(recipe):
    assert list(recipe.stages) == ["read_noise", "hot_pixels"]


def test_a_stage_left_out_does_not_run(recipe):
    without = parse_recipe(
        "name: a\nsensor: {technology: cmos, pixel_pitch: 4 um}", VOCABULARY, path=""
    )
    assert without.stages == {} and without.grades == ()
    assert without.frames == FrameRules() and without.zones == {}


def test_kinds_may_be_words_or_numbers(recipe):
    assert recipe.frames.kinds == {"LIGHT": "flat", "7": "ignore"}


def test_a_range_is_two_limits_and_each_keeps_its_line(recipe):
    assert recipe.grades[0].limits == (
        Limit("read_noise", "<=", 5.0, "electron", 30),
        Limit("conversion_gain", ">=", 1.8, "electron/DN", 31),
        Limit("conversion_gain", "<=", 2.2, "electron/DN", 31),
        Limit("hot_pixels", "<=", 100.0, "", 32),
        Limit("dynamic_range", ">=", 66.0, "dB", 33),
    )


def test_the_long_form_names_place_temperature_and_rule(recipe):
    assert recipe.grades[1].limits[1] == Limit(
        "read_noise",
        "<=",
        9.0,
        "electron",
        37,
        of="worst",
        scope="output left, colour red, 550 nm",
        zone="centre",
        temperature=-10.0,
        rule="simple",
    )


def test_grades_stand_as_written_and_the_last_may_ask_for_nothing(recipe):
    assert [grade.name for grade in recipe.grades] == ["science", "engineering", "sample"]
    assert recipe.grades[2].limits == ()


def test_a_limit_on_the_only_output_speaks_of_the_device():
    # With one output, measurements carry the scope "device".
    text = """\
name: a
sensor: {technology: ccd, pixel_pitch: 9 um, outputs: {main: {}}}
stages: {read_noise: }
grades: {good: {read_noise: {limit: "<= 5 electron", output: main}}}
"""
    assert parse_recipe(text, VOCABULARY, path="").grades[0].limits[0].scope is None


def test_limits_convert_to_the_quantity_s_unit():
    text = """\
name: a
sensor: {technology: ccd, pixel_pitch: 9 um}
grades: {good: {dark_current: <= 18 electron/h, prnu: <= 1 %, cti_serial: <= 5e-6}}
"""
    limits = parse_recipe(text, VOCABULARY, path="").grades[0].limits
    assert [(limit.bound, limit.unit) for limit in limits] == [
        (0.005, "electron/s"),
        (1.0, "%"),
        (5e-6, ""),
    ]


def test_the_digest_is_that_of_the_file(tmp_path):
    path = tmp_path / "mine.yaml"
    path.write_bytes(RECIPE.replace("\n", "\r\n").encode())
    recipe = load_recipe(path, VOCABULARY)
    assert recipe.sha256 == hashlib.sha256(path.read_bytes()).hexdigest()
    assert recipe.text.encode() == path.read_bytes()
    assert recipe.path == str(path)
    assert recipe.grades[0].limits[0].line == 30


def test_the_title_is_found_without_judging_the_rest(tmp_path):
    path = tmp_path / "mine.yaml"
    path.write_text("name: a b\nsensor: 3\n")
    assert recipe_title(path) == "a b"


@pytest.mark.parametrize(
    "content, sentence",
    [
        (b"name: \xff", "{path}:1  not UTF-8 text; save the file as UTF-8"),
        (b"#" * (LONGEST + 1), "{path}: larger than 1 MiB; a recipe is a few pages at most"),
        (None, "{path}: no such file; expected a YAML file"),
    ],
)
def test_a_file_that_is_no_text_is_refused(tmp_path, content, sentence):
    path = tmp_path / "mine.yaml"
    if content is not None:
        path.write_bytes(content)
    with pytest.raises(RecipeError) as caught:
        load_recipe(path, VOCABULARY)
    assert caught.value.problems == (sentence.format(path=path),)


def test_a_folder_and_a_pipe_are_refused_without_being_opened(tmp_path):
    import os

    with pytest.raises(RecipeError, match="this is a folder"):
        load_recipe(tmp_path, VOCABULARY)
    os.mkfifo(tmp_path / "pipe")
    with pytest.raises(RecipeError, match="no such file"):
        load_recipe(tmp_path / "pipe", VOCABULARY)


def test_all_ready_recipes_are_found_by_name():
    from sensorgrade.errors import RequestError
    from sensorgrade.recipe.library import find_recipe, recipe_names

    for name in recipe_names():
        assert find_recipe(name).name == f"{name}.yaml"
    with pytest.raises(RequestError, match=r"no-such-thing: no such recipe file, and no ready"):
        find_recipe("no-such-thing")
    with pytest.raises(RequestError, match=r"a/b\.yaml: no such recipe file"):
        find_recipe(str(Path("a") / "b.yaml"))


def test_any_options_class_can_be_read_from_a_file_of_its_own(tmp_path):
    path = tmp_path / "pairs.yaml"
    path.write_text("pairs: 3\n")
    assert load_options(path, ReadNoise) == ReadNoise(pairs=3)
    path.write_text("pairs: 0\npears: 3\n")
    with pytest.raises(RecipeError) as caught:
        load_options(path, ReadNoise)
    assert caught.value.problems == (
        f"{path}:1  pairs: expected a whole number, 1 or more, found 0",
        f"{path}:2  pears: no such key; nearest is pairs",
    )


def test_a_quantity_per_electron_is_written_with_a_slash():
    assert example("1 / electron") == "10 / electron"
    assert quantity("-3e-6 / electron", "1 / electron") == -3e-6


@pytest.mark.parametrize(
    "written, scope",
    [("550", "550 nm"), ("550 nm", "550 nm"), ("0.55 um", "550 nm"), ("Blue", "Blue")],
)
def test_a_wavelength_is_named_as_results_name_it(written, scope):
    text = f"""\
name: a
sensor: {{technology: ccd, pixel_pitch: 9 um}}
grades: {{good: {{prnu: {{limit: <= 1 %, wavelength: {written}}}}}}}
"""
    assert parse_recipe(text, VOCABULARY, path="").grades[0].limits[0].scope == scope
