import re
import time

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from sensorgrade.recipe.pattern import endless

ENDLESS = [
    *("(a+)+", "(a*)*b", "([a-z]+)*$", "((a|b)c)+", "(a|aa)+$", r"(\w+\s?)+!", "(?:a+){10,}"),
    *("(?P<kind>(a+)+)", "((a+)?)+", "(x(y(z+)))*", ".*" * 9, "(a+){50}"),
]
FINE = [
    r"(?P<kind>bias|dark|flat)_(?P<exposure>[0-9.]+)s_.*\.fits",
    *(
        "[(+*]+",
        r"\(a+\)+",
        "(ab)+",
        "(a+)b+",
        "(a|b)?c",
        "[]a+]+b",
        "(?P<serial>SN[0-9]+)/",
        "x{3}",
    ),
    r"(?i:a+)b(?=c+)(?!d*)",
]


@pytest.mark.parametrize("pattern", ENDLESS)
def test_patterns_that_could_take_for_ever_are_told(pattern):
    re.compile(pattern)
    assert "could take for ever" in (endless(pattern) or "")


@pytest.mark.parametrize("pattern", FINE)
def test_usual_patterns_are_fine(pattern):
    re.compile(pattern)
    assert endless(pattern) is None


PART = st.sampled_from(["a", "b", ".", "[ab]", "(?P<n>a)", r"\w", "_"])
REPEAT = st.sampled_from(["", "", "*", "+", "?", "{2,}", "{3}"])
PATTERN = st.recursive(
    st.builds(str.__add__, PART, REPEAT),
    lambda inner: st.one_of(
        st.lists(inner, min_size=1, max_size=4).map("".join),
        st.builds(lambda a, b, r: f"(?:{a}|{b}){r}", inner, inner, REPEAT),
        st.builds(lambda a, r: f"({a}){r}", inner, REPEAT),
    ),
    max_leaves=8,
)


@settings(deadline=None, max_examples=150)
@given(PATTERN)
def test_what_is_let_through_ends_in_time(pattern):
    try:
        compiled = re.compile(pattern)
    except re.error:
        return
    if endless(pattern) is None and sum(map(pattern.count, "*+{")) <= 4:
        # Long enough to tell doubling with each letter from a power of their number.
        start = time.process_time()
        compiled.fullmatch("a" * 28 + "!")
        assert time.process_time() - start < 2
