from dataclasses import replace

import numpy as np
import pytest

from grading.given import limit, measured, recipe
from grading.test_expected_uncertainty import DEVICE, TAKEN
from sensorgrade.grading.expected_uncertainty import FrameSet, dark_current_uncertainty
from sensorgrade.grading.grade import grade
from sensorgrade.grading.plan import expected_uncertainty, frame_plan, undecided_share

DARK = limit("dark_current", "<=", 0.4, "electron / s")


def planned(*limits, given=TAKEN, **how):
    return frame_plan(recipe(("a", limits), rule="non-binary"), DEVICE, given=given, **how)


def test_the_set_that_is_enough_decides_with_the_chance_asked():
    few = replace(TAKEN, bias=2, darks=2, dark_exposure=10.0)
    (plan,) = planned(DARK, given=few, distance=10.0, power=90.0)
    assert plan.given > plan.needed
    assert plan.chance < 0.9
    rng = np.random.default_rng(1)
    doubt = expected_uncertainty(DARK, DEVICE, plan.enough)
    assert doubt <= plan.needed
    asked = recipe(("a", [DARK]), rule="non-binary")
    decided = [
        grade(
            [measured("dark_current", rng.normal(0.36, doubt), doubt, unit="electron / s")],
            [],
            [],
            recipe=asked,
        ).decision
        == "accept"
        for _ in range(2000)
    ]
    assert np.mean(decided) >= 0.9 - 5 * np.sqrt(0.09 / 2000)


def test_no_smaller_set_would_do():
    few = replace(TAKEN, bias=2, darks=2, dark_exposure=10.0)
    (plan,) = planned(DARK, given=few)
    for part in ("bias", "darks"):
        fewer = replace(plan.enough, **{part: getattr(plan.enough, part) - 2})
        if getattr(fewer, part) >= 2:
            assert expected_uncertainty(DARK, DEVICE, fewer) > plan.needed


def test_a_set_that_is_enough_is_left_as_it_is():
    (plan,) = planned(limit("read_noise", "<=", 6.0))
    assert plan.enough == TAKEN
    assert plan.decidable < plan.distance
    assert plan.chance > 0.9


def test_what_frames_cannot_reach_says_what_stands_in_the_way():
    (plan,) = planned(DARK, distance=0.01)
    assert plan.enough is None
    assert "sets the floor" in plan.note


def test_what_has_no_formula_is_not_guessed():
    (plan,) = planned(limit("row_noise", "<=", 1.0))
    assert plan.given is None
    assert "no formula" in plan.note


def test_what_the_given_set_cannot_measure_at_all_is_planned_from_nothing():
    bare = FrameSet(bias=0, darks=0, dark_exposure=60.0, pairs=2, levels=8, flats=0)
    (plan,) = planned(DARK, given=bare)
    assert plan.given is None and plan.decidable is None
    assert plan.enough.darks >= 2 and plan.enough.bias >= 2


@pytest.mark.parametrize("rule", ["guarded acceptance", "non-binary"])
def test_guarded_acceptance_lets_few_devices_just_past_the_limit_through(rule):
    rng = np.random.default_rng(2)
    asked = recipe(("a", [DARK]), rule=rule)
    doubt = 0.02
    true = 0.4 + rng.uniform(0.0, 0.001, 2000)
    accepted = sum(
        grade(
            [measured("dark_current", value + rng.normal(0.0, doubt), doubt, unit="electron / s")],
            [],
            [],
            recipe=asked,
        ).decision
        == "accept"
        for value in true
    )
    # At most 5 %, with five standard errors of 2,000 devices; not so few that the guard is idle.
    assert 0.025 * 2000 < accepted < (0.05 + 5 * np.sqrt(0.0475 / 2000)) * 2000


def test_undecided_devices_shrink_with_frames_as_foretold():
    rng = np.random.default_rng(3)
    true = rng.uniform(0.3, 0.5, 2000)
    asked = recipe(("a", [DARK]), rule="non-binary")
    shares = []
    for frames in (2, 4, 8, 16):
        taken = replace(TAKEN, bias=frames, darks=frames, dark_exposure=20.0)
        foretold = undecided_share(
            true,
            bound=0.4,
            standard_uncertainty=dark_current_uncertainty(DEVICE, taken),
            confidence=95.0,
        )
        undecided = 0
        for value in true:
            # The levels of the frames themselves, and the line through their means.
            bias = rng.normal(0.0, 0.5, frames).mean()
            dark = value * 20.0 + rng.normal(0.0, 0.5, frames).mean()
            reading = (dark - bias) / 20.0
            doubt = 0.5 * np.sqrt(2.0 / frames) / 20.0
            found = grade(
                [measured("dark_current", reading, doubt, unit="electron / s")],
                [],
                [],
                recipe=asked,
            )
            undecided += found.decision == "undecided"
        shares.append(undecided / 2000)
        assert shares[-1] == pytest.approx(foretold, rel=0.2)
    assert np.all(np.diff(shares) < 0)
