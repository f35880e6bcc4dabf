"""Injected defects are in the frames where and as the truth says."""

import numpy as np
import pytest
from numpy.testing import assert_allclose

from sensorgrade.errors import RequestError
from sensorgrade.simulate.device import simulate_device
from sensorgrade.simulate.maps import Telegraph, telegraph_states
from sensorgrade.simulate.model import Amplifier, DefectModel
from sensorgrade.simulate.plan import FramePlan, StackPlan
from simulate.sensors import one_output, two_outputs

QUIET = Amplifier(conversion_gain=1.0, read_noise=1.0)


def device(*defects, build=one_output, bias=0, dark=0, flat=0):
    plan = FramePlan(
        stacks=tuple(
            StackPlan(kind=kind, frames=frames, exposure=time, light=light)
            for kind, frames, time, light in (
                ("bias", bias, 0.0, 0.0),
                ("dark", dark, 10.0, 0.0),
                ("flat", flat, 1.0, 10000.0),
            )
            if frames
        )
    )
    return simulate_device(build(amplifier=QUIET, defects=tuple(defects)), plan)


def stack(simulated):
    return np.array([frame.planes[""].data for frame in simulated.frames.frames]).astype(float)


def test_hot_pixels_stand_where_the_truth_says():
    found = device(DefectModel(kind="hot", count=30, current=200.0), dark=1)
    image = stack(found)[0]
    positions = {tuple(at) for at in np.argwhere(image > 1500)}
    expected = {(d.section.row_start, d.section.column_start) for d in found.truth.defects}
    assert positions == expected
    assert len(positions) == 30
    assert {defect.name for defect in found.truth.defects} == {"hot pixel"}


@pytest.mark.parametrize(
    ("kind", "response", "expected"),
    [("dead", None, 0.0), ("dim", 60.0, 0.6), ("bright", 130.0, 1.3)],
)
def test_response_defects_scale_the_light(kind, response, expected):
    found = device(DefectModel(kind=kind, row=20, column=30, response=response), flat=1)
    image = stack(found)[0] - 1000
    assert_allclose(image[20, 30], 10000 * expected, atol=600)
    assert_allclose(image[20, 31], 10000, atol=600)


def test_a_cluster_and_partial_columns_cover_their_pixels():
    found = device(
        DefectModel(kind="dead", row=10, column=10, height=3, width=4),
        DefectModel(kind="dead", row=50, column=60, height=0),
        DefectModel(kind="dead", row=90, column=0, width=0),
        flat=1,
    )
    dead = stack(found)[0] < 3000
    expected = np.zeros((128, 128), bool)
    expected[10:13, 10:14] = True
    expected[50:, 60] = True
    expected[90, :] = True
    assert (dead == expected).all()
    assert (dead == ~found.truth.sound).all()
    assert [d.name for d in found.truth.defects] == ["dead cluster", "dead column", "dead row"]


def test_a_partial_column_reaches_to_the_side_read_last():
    # The right output starts at the top, so the column is lost from row 20 downwards.
    found = device(DefectModel(kind="dead", row=20, column=60, height=0), build=two_outputs, flat=1)
    dead = stack(found)[0][:, :96] < 3000
    assert dead[:21, 60].all()
    assert dead.sum() == 21


def test_noisy_and_stuck_pixels():
    found = device(
        DefectModel(kind="noisy", row=5, column=6, noise=40.0),
        DefectModel(kind="stuck", row=7, column=8, code=123.0),
        bias=200,
    )
    frames = stack(found)
    assert_allclose(frames[:, 5, 6].std(), np.hypot(40, 1), rtol=5 / np.sqrt(400))
    assert (frames[:, 7, 8] == 123).all()


def test_stuck_pixels_of_a_turned_output_stay_in_their_place():
    found = device(DefectModel(kind="stuck", row=7, column=80, code=9.0), build=two_outputs, bias=1)
    assert np.argwhere(stack(found)[0] == 9).tolist() == [[7, 80]]


def test_nonlinear_pixel_loses_its_share():
    found = device(DefectModel(kind="nonlinear", row=5, column=6, curvature=50.0), flat=100)
    mean = stack(found)[:, 5, 6].mean() - 1000
    assert_allclose(mean, 10000 * (1 - 0.5 * 0.1), atol=5 * 100 / 10)


def test_telegraph_pixel_steps_by_its_amplitude():
    found = device(
        DefectModel(
            kind="telegraph", row=5, column=6, amplitude=80.0, dwell_low=10.0, dwell_high=10.0
        ),
        bias=400,
    )
    samples = stack(found)[:, 5, 6] - 1000
    high = samples > 40
    assert_allclose(samples[high].mean(), 80, atol=0.5)
    assert_allclose(samples[~high].mean(), 0, atol=0.5)
    assert 0.3 < high.mean() < 0.7


def test_telegraph_dwell_times():
    telegraph = Telegraph(
        rows=np.zeros(200, int),
        columns=np.zeros(200, int),
        amplitude=np.ones(200),
        current=np.zeros(200),
        dwell_low=np.full(200, 30.0),
        dwell_high=np.full(200, 10.0),
    )
    times = np.arange(0, 2000.0, 1.0)
    states = telegraph_states(telegraph, times, np.random.default_rng(1))
    # 200 pixels x 2000 s hold about 2000 x 200 / 40 visits, so shares are good to about 1 %.
    assert_allclose(states.mean(), 0.25, atol=0.015)
    # Sampled each second, a stay of mean 10 s ends with probability 1 - exp(-dt (1/10 + 1/30))
    # times the share of the other state.
    ends = (states[:-1] & ~states[1:]).sum() / states[:-1].sum()
    assert_allclose(ends, 0.75 * (1 - np.exp(-1 / 10 - 1 / 30)), rtol=0.05)


def test_random_places_do_not_touch():
    found = device(DefectModel(kind="hot", count=400, current=1.0), bias=1)
    places = np.array([(d.section.row_start, d.section.column_start) for d in found.truth.defects])
    distance = np.abs(places[:, None] - places[None]).max(axis=2)
    np.fill_diagonal(distance, 9)
    assert distance.min() >= 2


def test_a_full_image_and_a_place_outside_are_refused():
    with pytest.raises(RequestError, match=r"defects\[0\].count: no free place"):
        device(DefectModel(kind="hot", count=9000, current=1.0), bias=1)
    with pytest.raises(RequestError, match="leaves the image"):
        device(DefectModel(kind="hot", row=500, column=1, current=1.0), bias=1)
    with pytest.raises(RequestError, match=r"defects\[0\].response"):
        device(DefectModel(kind="dim", row=5, column=1), bias=1)
