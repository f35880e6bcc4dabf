import pytest

from grading.given import counted
from sensorgrade.grading.rule import count_outcome, outcome


@pytest.mark.parametrize(
    "rule, at_bound, at_inner, at_outer",
    [
        ("simple", "accept", "accept", "reject"),
        ("guarded acceptance", "reject", "accept", "reject"),
        ("guarded rejection", "accept", "accept", "accept"),
        ("non-binary", "undecided", "accept", "undecided"),
    ],
)
@pytest.mark.parametrize("relation, inward", [("<=", -1.0), (">=", 1.0)])
def test_a_reading_on_a_boundary_takes_the_better_outcome(
    rule, at_bound, at_inner, at_outer, relation, inward
):
    def ruled(value):
        return outcome(value, relation=relation, bound=5.0, guard=0.5, rule=rule)

    assert ruled(5.0) == at_bound
    assert ruled(5.0 + 0.5 * inward) == at_inner
    assert ruled(5.0 - 0.5 * inward) == at_outer
    assert ruled(5.0 - 0.50001 * inward) == "reject"
    assert ruled(5.0 + 0.50001 * inward) == "accept"


def test_just_inside_the_guard_band_is_rejected_by_guarded_acceptance():
    assert (
        outcome(4.5001, relation="<=", bound=5.0, guard=0.5, rule="guarded acceptance") == "reject"
    )


@pytest.mark.parametrize("rule", ["guarded acceptance", "guarded rejection", "non-binary"])
def test_without_doubt_every_rule_decides_as_the_simple_one(rule):
    for value in (4.999, 5.0, 5.001):
        given = {"relation": "<=", "bound": 5.0, "guard": 0.0}
        assert outcome(value, rule=rule, **given) == outcome(value, rule="simple", **given)


@pytest.mark.parametrize(
    "rule, expected",
    [
        ("simple", "accept"),
        ("guarded acceptance", "reject"),
        ("guarded rejection", "accept"),
        ("non-binary", "undecided"),
    ],
)
def test_a_count_near_its_limit_by_each_rule(rule, expected):
    near = counted("hot_pixels", 99, 99.0, 4.0)
    assert count_outcome(near, relation="<=", bound=100.0, confidence=95.0, rule=rule) == expected


def test_a_count_without_doubt_is_compared_as_it_is():
    for rule in ("simple", "guarded acceptance", "guarded rejection", "non-binary"):
        for found, expected in ((100, "accept"), (101, "reject")):
            sure = counted("hot_pixels", found)
            given = {"relation": "<=", "bound": 100.0, "confidence": 95.0, "rule": rule}
            assert count_outcome(sure, **given) == expected
