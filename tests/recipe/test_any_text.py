"""Whatever the text, the reader answers with a Recipe or a RecipeError, and soon."""

import time

import pytest
import yaml
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose

from recipe.test_load import RECIPE
from recipe.vocabulary_for_tests import VOCABULARY
from sensorgrade.errors import RecipeError
from sensorgrade.frames.geometry import fits_section
from sensorgrade.recipe.document import (
    DEEPEST,
    LONGEST,
    MOST_PROBLEMS,
    Mapping,
    Problems,
    Scalar,
    document,
)
from sensorgrade.recipe.load import parse_recipe
from sensorgrade.recipe.model import Section
from sensorgrade.recipe.quantities import USUAL, WrongQuantity, quantity
from sensorgrade.recipe.section import WrongSection, section

ANY = settings(max_examples=200, deadline=None, suppress_health_check=list(HealthCheck))


def judged(text):
    """Read ``text``; a mistake must come as printable lines that name the recipe."""
    try:
        parse_recipe(text, VOCABULARY, path="r.yaml")
    except RecipeError as error:
        assert error.problems
        for problem in error.problems:
            assert problem.startswith("r.yaml:") and problem.isprintable(), problem
            problem.encode("utf-8")
    return True


@ANY
@given(st.text())
def test_any_text_is_judged(text):
    assert judged(text)


@ANY
@given(st.text(alphabet=":{}[],-#&*!|>'\"%@`\n\t ab1<=.~?\\\r\x85\u2028"))
def test_any_text_of_yaml_s_own_characters_is_judged(text):
    assert judged(text)


VALUES = st.recursive(
    st.none() | st.booleans() | st.integers() | st.floats() | st.text(max_size=20),
    lambda inner: st.lists(inner, max_size=4) | st.dictionaries(st.text(max_size=8), inner),
    max_leaves=12,
)
KEYS = ("name", "sensor", "frames", "stages", "zones", "decision", "grades", "other")


@ANY
@given(st.dictionaries(st.sampled_from(KEYS), VALUES))
def test_any_values_under_the_right_keys_are_judged(tree):
    assert judged(yaml.safe_dump(tree, allow_unicode=True))


@ANY
@given(st.data())
def test_any_value_in_place_of_a_right_one_is_judged(data):
    tree = yaml.safe_load(RECIPE)
    part = tree
    while isinstance(part, dict) and part:
        key = data.draw(st.sampled_from(sorted(part, key=str)))
        if data.draw(st.booleans()) or not isinstance(part[key], dict):
            part[key] = data.draw(VALUES)
            break
        part = part[key]
    assert judged(yaml.safe_dump(tree, allow_unicode=True))


def flipped(data, text):
    """``text`` with a few characters replaced, put in or taken out."""
    characters = list(text)
    for _ in range(data.draw(st.integers(1, 4))):
        place = data.draw(st.integers(0, len(characters) - 1))
        new = data.draw(st.text(max_size=2) | st.sampled_from([*":{}[]-#&*!|>'\"\n\t "]))
        characters[place : place + data.draw(st.integers(0, 2))] = new
    return "".join(characters)


@ANY
@given(st.data())
def test_a_damaged_recipe_is_judged(data):
    assert judged(flipped(data, RECIPE))


@pytest.mark.nightly
@settings(max_examples=20_000, deadline=5000, suppress_health_check=list(HealthCheck))
@given(st.data())
def test_twenty_thousand_damaged_recipes_are_judged(data):
    assert judged(flipped(data, RECIPE))


HEAD = "name: a\nsensor: {technology: ccd, pixel_pitch: 9 um}\nstages: {read_noise: }\n"
HUGE = {
    "one comment": "#" * (LONGEST - 1),
    "one word": "a" * LONGEST,
    "quoted": '"' + "a" * (LONGEST - 2) + '"',
    "many keys": "\n".join(f"k{n}: 1" for n in range(100_000))[:LONGEST],
    "one key again": "a: 1\n" * (LONGEST // 5),
    "brackets": "[" * LONGEST,
    "dashes": "- " * (LONGEST // 2),
    "questions": "? " * (LONGEST // 2),
    "colons": "a: " * (LONGEST // 3),
    "lines": "\n" * LONGEST,
    "documents": "---\n" * (LONGEST // 4),
    "commas": "[" + "," * (LONGEST - 2) + "]",
    "limits on one thing": HEAD + "grades: {a: {read_noise: [" + "<= 5 electron," * 60_000 + "]}}",
    "unknown limits": HEAD + "grades: {a: {" + ",".join(f"reed_noize{n}" for n in range(45_000)),
    "unknown limits with values": HEAD
    + "grades: {a: {"
    + ",".join(f"reed_noize{n}: <= 5 DN" for n in range(20_000))
    + "}}",
    "grades": HEAD
    + "grades: {"
    + ",".join(f"g{n}: {{read_noise: <= {n} electron}}" for n in range(12_000))
    + "}",
    "escapes": '"' + "\\x41" * (LONGEST // 4 - 1) + '"',
}


@pytest.mark.parametrize("text", HUGE.values(), ids=HUGE)
def test_the_largest_recipe_is_judged_in_seconds(text):
    start = time.process_time()
    judged(text)
    assert time.process_time() - start < 5.0


PIXELS = st.integers(0, 99_999)


@given(PIXELS, PIXELS, st.integers(1, 9999), st.integers(1, 9999))
def test_a_section_written_and_read_is_the_same(row, column, rows, columns):
    original = Section(row, row + rows, column, column + columns)
    assert section(fits_section(original)) == original
    assert original.shape == (rows, columns)


@given(st.text() | st.from_regex(r"\[[0-9*:-]*,[0-9*:-]*\]", fullmatch=True))
def test_any_text_is_a_section_or_refused_with_a_reason(text):
    try:
        read = section(text)
    except WrongSection as wrong:
        assert str(wrong)
    else:
        assert 0 <= read.row_start < read.row_stop and 0 <= read.column_start < read.column_stop


@given(st.floats(allow_nan=False, allow_infinity=False), st.sampled_from(USUAL))
def test_a_quantity_in_its_own_unit_is_read_exactly(value, unit):
    assert quantity(f"{value!r} {unit}", unit) == value


@given(
    st.floats(1e-3, 1e6),
    st.sampled_from([("mm", "um", 1e3), ("ms", "us", 1e3), ("nA / cm2", "pA / cm2", 1e3)]),
)
def test_a_quantity_converts_to_twelve_digits(value, units):
    given_unit, wanted, factor = units
    assert_allclose(quantity(f"{value!r}{given_unit}", wanted), value * factor, rtol=1e-11)


@given(st.text() | st.from_regex(r"[0-9.]{1,4} ?[a-zA-Z%/ *().^0-9-]{0,12}", fullmatch=True))
def test_any_text_is_a_quantity_or_refused_with_a_reason(text):
    for unit in ("um", "degC", "", "%", "electron / s", "dB"):
        try:
            quantity(text, unit)
        except WrongQuantity as wrong:
            assert str(wrong)


def test_the_tree_keeps_the_line_of_every_key_and_value():
    root = document("a:\n  b: 1\n\n  c:\n    - x\n    - y\n", Problems("r.yaml"))
    assert isinstance(root, Mapping)
    inner = root.entries["a"].value
    assert root.entries["a"].line == 1 and inner.entries["b"].value == Scalar("1", True, 2)
    assert inner.entries["c"].line == 4
    assert [item.line for item in inner.entries["c"].value.items] == [5, 6]


def test_the_deepest_recipe_there_can_be_is_read():
    text = "a: " + "{b: " * (DEEPEST - 1) + "1" + "}" * (DEEPEST - 1)
    assert isinstance(document(text, Problems("r.yaml")), Mapping)


def test_nobody_is_told_of_more_mistakes_than_one_can_read():
    with pytest.raises(RecipeError) as caught:
        parse_recipe("\n".join(f"k{n}: 1" for n in range(5000)), VOCABULARY, path="r.yaml")
    assert len(caught.value.problems) == MOST_PROBLEMS
