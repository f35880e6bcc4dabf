"""The proportional transfer loss keeps charge and follows the exact law."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose

from sensorgrade.simulate.shift import deferred


def plain(packets, inefficiency):
    """One line shifted step by step into an output register, as charge really moves."""
    wells = np.array(packets, float)
    arrived = []
    for _ in range(len(wells)):
        moved = wells * (1 - inefficiency)
        arrived.append(moved[0])
        wells = wells - moved
        wells[:-1] += moved[1:]
    return np.array(arrived)


@pytest.mark.parametrize("inefficiency", [1e-6, 1e-4, 1e-2, 0.2])
def test_equals_shifting_step_by_step(inefficiency):
    packets = np.random.default_rng(1).uniform(0, 50000, (1, 60)).astype(np.float32)
    found = deferred(packets, inefficiency, axis=1)[0]
    assert_allclose(found, plain(packets[0], inefficiency), rtol=2e-6, atol=1e-3)


@given(st.floats(0, 1e-3), st.integers(0, 2**32 - 1))
@settings(max_examples=30, deadline=None)
def test_charge_is_kept_when_the_trail_has_room(inefficiency, seed):
    packets = np.zeros((80, 3), np.float32)
    packets[:40] = np.random.default_rng(seed).uniform(0, 50000, (40, 3))
    found = deferred(packets, inefficiency, axis=0)
    assert_allclose(found.sum(0, dtype=float), packets.sum(0, dtype=float), rtol=1e-6)


def test_trail_sum_over_the_last_pixel_gives_the_inefficiency():
    packets = np.zeros((1, 2048 + 30), np.float32)
    packets[0, :2048] = 50000
    for inefficiency, first in ((1e-6, 0.00204590), (1e-5, 0.0202716), (1e-4, 0.1851796)):
        found = deferred(packets, inefficiency, axis=1)[0].astype(float)
        trail = found[2048:].sum() / found[2047] / 2048
        assert_allclose(trail, inefficiency / (1 - inefficiency), rtol=1e-4)
        assert_allclose(found[2048] / 50000, first, rtol=1e-4)
