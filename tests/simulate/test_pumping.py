"""Simulated pumping moves charge by the law and loses not one electron."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose, assert_array_equal

from sensorgrade.errors import RequestError
from sensorgrade.frames.geometry import geometry
from sensorgrade.simulate.device import simulate_device
from sensorgrade.simulate.model import TrapModel
from sensorgrade.simulate.plan import FramePlan, StackPlan
from sensorgrade.simulate.pumping import PlacedTrap, placed_traps, pump
from simulate.sensors import two_outputs


def trap(row=3, column=2, step=1, capture=1.0):
    return PlacedTrap(row, column, step, 0.3, 5e-15, capture, "")


@settings(max_examples=60, deadline=None)
@given(
    seed=st.integers(0, 2**32 - 1),
    level=st.integers(0, 3000),
    cycles=st.integers(0, 5000),
    time=st.floats(0.1, 1e5),
    traps=st.lists(
        st.builds(trap, st.integers(1, 6), st.integers(0, 4), st.sampled_from((-1, 1))), max_size=8
    ),
)
def test_no_electron_is_lost_and_no_packet_gives_more_than_it_holds(
    seed, level, cycles, time, traps
):
    rng = np.random.default_rng(seed)
    charge = rng.poisson(level, (8, 5)).astype(np.float32)
    before = charge.sum(axis=0, dtype=float)
    pump(charge, tuple(traps), cycles=cycles, phase_time=time, kelvin=160.0, rng=rng)
    assert_array_equal(charge.sum(axis=0, dtype=float), before)
    assert charge.min() >= 0
    assert_array_equal(charge, np.rint(charge))


def test_charge_carried_follows_the_law():
    one = trap(capture=0.7)
    tau = one.emission_time(160.0)
    for share in (0.2, 0.7, 2.0):
        rng = np.random.default_rng(5)
        moved = []
        for _ in range(300):
            charge = np.full((8, 5), 9000.0, np.float32)
            pump(charge, (one,), cycles=4000, phase_time=1e6 * share * tau, kelvin=160.0, rng=rng)
            moved.append(charge[4, 2] - 9000)
            assert charge[3, 2] + charge[4, 2] == 18000
        p = 0.7 * (np.exp(-share) - np.exp(-2 * share))
        assert_allclose(np.mean(moved), 4000 * p, atol=5 * np.sqrt(4000 * p / 300))
        assert_allclose(np.var(moved), 4000 * p * (1 - p), rtol=5 * np.sqrt(2 / 300))


def test_traps_stay_in_their_output_and_know_the_side_of_the_register():
    layout = geometry(two_outputs().sensor, {"": (64, 112)})
    rng = np.random.default_rng(1)
    common = {"energy": 0.3, "cross_section": 5e-15}
    models = (
        TrapModel(count=400, **common),
        TrapModel(row=10, column=5, toward="register", **common),
        TrapModel(row=10, column=90, toward="register", **common),
    )
    *many, left, right = placed_traps(models, layout, rng)
    assert (left.output, left.step) == ("left", -1)
    assert (right.output, right.step) == ("right", 1)  # read from the top
    assert all(0 <= one.row + one.step < 64 for one in many)
    assert {one.step for one in many} == {-1, 1}
    with pytest.raises(RequestError, match="row 64, column 0 leaves the image of 64 x 96"):
        placed_traps((TrapModel(row=64, column=0, **common),), layout, rng)
    with pytest.raises(RequestError, match="carries charge off the output"):
        placed_traps((TrapModel(row=0, column=0, toward="register", **common),), layout, rng)


def test_pumped_frames_say_how_they_were_pumped():
    plan = FramePlan(
        stacks=(
            StackPlan(kind="flat", frames=1, light=1000.0),
            StackPlan(kind="pump", frames=2, light=1000.0, cycles=500, phase_time=12.5),
        )
    )
    flat, pumped = simulate_device(two_outputs(), plan).frames.stacks
    assert (pumped.cycles, pumped.phase_time) == (500, 12.5)
    assert (flat.cycles, flat.phase_time) == (None, None)
    assert pumped.frames[0].cycles == 500
    light = pumped.frames[0].planes[""].data[:, :96].mean() - 1000
    assert_allclose(light, 500, rtol=0.02)
