"""Pocket pumping: traps are found where they are, with their emission times and energies."""

from dataclasses import replace
from itertools import pairwise

import numpy as np
import pytest
from numpy.testing import assert_allclose

from measure.plain_reduction import knowing
from sensorgrade.errors import NotMeasured
from sensorgrade.frames.geometry import geometry
from sensorgrade.masters.master import Masters
from sensorgrade.masters.reduction import reduce_frames
from sensorgrade.measure.emission_fit import (
    candidates,
    emission_fits,
    pumped_share,
    pumped_share_slope,
    trap_energy,
)
from sensorgrade.measure.pocket_pumping import PocketPumpingOptions, pocket_pumping
from sensorgrade.measure.stage import Inputs
from sensorgrade.measurement import Measurement
from sensorgrade.recipe.model import OutputOptions, Section, Sensor
from sensorgrade.silicon import emission_time
from sensorgrade.simulate.device import simulate_device
from sensorgrade.simulate.model import (
    Amplifier,
    DarkSignal,
    DefectModel,
    Events,
    Response,
    SensorModel,
    TrapModel,
)
from sensorgrade.simulate.plan import FramePlan, StackPlan

SENSOR = Sensor(
    technology="ccd",
    pixel_pitch=12.0,
    adc_bits=16,
    outputs={
        "lower": OutputOptions(image=Section(0, 100, 0, 200), corner="bottom left"),
        "upper": OutputOptions(image=Section(100, 200, 0, 200), corner="top right"),
    },
)
MODEL = SensorModel(
    sensor=SENSOR,
    rows=200,
    columns=200,
    amplifier=Amplifier(conversion_gain=1.2, read_noise=4.0),
    response=Response(pixel=1.0),
    traps=(
        TrapModel(count=40, energy=0.23, cross_section=5e-15, capture=0.8),
        TrapModel(count=40, energy=0.32, cross_section=5e-15, capture=0.6),
    ),
)
TEMPERATURES = (-120.0, -110.0, -100.0)
TIMES = tuple(round(float(t), 2) for t in np.geomspace(2, 5000, 12))
CYCLES = 4000
LEVEL = 5000.0


def plan(temperatures=TEMPERATURES, times=TIMES, flats=5):
    return FramePlan(
        stacks=(
            StackPlan(kind="bias", frames=5),
            StackPlan(kind="flat", frames=flats, light=LEVEL),
            *(
                StackPlan(
                    kind="pump",
                    frames=3,
                    light=LEVEL,
                    cycles=CYCLES,
                    phase_time=time,
                    temperature=temperature,
                )
                for temperature in temperatures
                for time in times
            ),
        ),
        temperature=-110.0,
        shading=5.0,
        lamp_noise=0.3,
    )


def inspected(model=MODEL, bench=None, *, seed=0, options=None):
    made = simulate_device(model, bench or plan(), seed=seed)
    layout = geometry(model.sensor, {"": (model.rows, model.columns)})
    reduced = reduce_frames(made.frames, layout, model.sensor, threads=1)
    inputs = knowing(
        Inputs(model.sensor, reduced, Masters(None, None, None), {}),
        *(
            Measurement("conversion_gain", region.scope, 1.2, 0.01, "electron / DN", 9)
            for region in layout.regions
        ),
    )
    return made.truth, pocket_pumping(inputs, options or PocketPumpingOptions())


def true_traps(truth):
    """By place and side: the trap, and its deviations in the best phase time."""
    noise = np.sqrt((LEVEL + 16) / 2 * (1 / 3 + 1 / 5))
    found = {}
    for trap in truth.traps:
        register = 1 if trap.output == "upper" else -1
        best = max(
            CYCLES * trap.capture * pumped_share(t * 1e-6 / trap.emission_time(T + 273.15), 2.0)
            for T in TEMPERATURES
            for t in TIMES
        )
        side = "register" if trap.step == register else "away"
        found[trap.row, trap.column, side] = (trap, float(best) / noise)
    return found


def test_traps_are_found_with_their_times_and_energies():
    seen = visible = found = right = 0
    relative, energies, deviations = [], [], []
    for seed in range(3):
        truth, result = inspected(seed=seed)
        traps = true_traps(truth)
        shown = {place for place, (_, size) in traps.items() if size >= 5}
        measured = {(t.row, t.column, t.side): t for t in result.traps}
        seen, visible = seen + len(shown & set(measured)), visible + len(shown)
        right, found = right + len(set(measured) & set(traps)), found + len(measured)
        for place in set(measured) & set(traps):
            true = traps[place][0]
            for e in measured[place].emissions:
                tau = true.emission_time(e.temperature)
                assert e.times_seen >= 3
                relative.append(e.tau / tau - 1)
                deviations.append(relative[-1] / e.tau_relative)
            if len(measured[place].emissions) == 3:
                energies.append(measured[place].energy.energy - true.energy)
    assert visible > 200
    assert seen >= 0.95 * visible
    assert right >= 0.95 * found
    assert np.median(np.abs(relative)) < 0.05
    assert np.std(deviations) == pytest.approx(1, abs=0.25)
    assert abs(np.mean(deviations)) < 5 / np.sqrt(len(deviations))
    assert len(energies) > 60
    assert np.median(np.abs(energies)) < 0.010


def test_density_counts_traps_per_pixel_of_each_output():
    truth, result = inspected(seed=4)
    for m in result.measurements:
        own = [t for t in true_traps(truth).values() if f"output {t[0].output}" == m.scope]
        visible = sum(size >= 5 for _, size in own)
        assert m.name == "trap_density"
        assert abs(m.value * 20000 - visible) <= 4
        assert m.n == 20000
    assert len(result.measurements) == 2


def test_a_sensor_without_traps_has_none_in_spite_of_hot_pixels_and_tracks():
    clean = replace(
        MODEL,
        traps=(),
        dark=DarkSignal(current=0.1, reference=-110.0),
        defects=(
            DefectModel(kind="hot", count=30, current=200.0),
            DefectModel(kind="dead", count=20),
            DefectModel(kind="dim", count=20, response=80.0),
        ),
        events=Events(rate=5.0),
    )
    total = sum(len(inspected(clean, seed=seed)[1].traps) for seed in range(3))
    assert total <= 2


def test_a_lone_trap_is_told_to_pixel_side_and_probability():
    for side, output, row in (("register", "lower", 40), ("away", "upper", 150)):
        lone = replace(
            MODEL,
            traps=(TrapModel(row=row, column=77, energy=0.3, cross_section=4e-15, toward=side),),
        )
        _, result = inspected(lone)
        (trap,) = result.traps
        assert (trap.row, trap.column, trap.side, trap.output) == (row, 77, side, output)
        for e in trap.emissions:
            truth = emission_time(0.3, 4e-15, e.temperature)
            assert abs(e.tau / truth - 1) < 5 * e.tau_relative
            assert abs(e.capture - 1) < 5 * e.capture_uncertainty
        assert abs(trap.energy.energy - 0.3) < 5 * trap.energy.standard_uncertainty
        assert_allclose(trap.amplitude, 1000, atol=6 * trap.amplitude_uncertainty)
        assert trap.candidates[0][0] in ("unidentified", "VV(=/-)", "VV(-/0)")


def test_one_temperature_gives_times_but_no_energy():
    _, result = inspected(bench=plan(temperatures=(-110.0,)))
    assert any(trap.emissions for trap in result.traps)
    assert all(trap.energy is None and trap.candidates == () for trap in result.traps)


def test_exact_amplitudes_return_exact_laws():
    times, cycles = np.geomspace(5, 2000, 9), np.full(9, 4000.0)
    tau, capture = np.array([20.0, 100.0, 700.0]), np.array([0.8, 0.3, 1.0])
    for window in (2.0, 3.0, 8.0):
        amplitude = 4000 * capture[:, None] * pumped_share(times / tau[:, None], window)
        fits = emission_fits(
            amplitude, times, cycles, np.eye(9) / 50**2, tau=tau * 1.7, window=window
        )
        assert_allclose(fits.tau, tau, rtol=1e-9)
        assert_allclose(fits.capture, capture, rtol=1e-9)


def test_the_slope_of_the_law_is_its_derivative():
    x = np.geomspace(0.05, 8, 30)
    step = 1e-6
    for window in (2.0, 4.0):
        numeric = pumped_share(x / np.exp(step), window) - pumped_share(x / np.exp(-step), window)
        assert_allclose(pumped_share_slope(x, window), numeric / (2 * step), atol=1e-9)


def test_energies_state_their_own_scatter():
    kelvin = np.array([153.0, 163.0, 173.0])
    rng = np.random.default_rng(6)
    truth = emission_time(0.3, 5e-15, kelvin)
    found = [
        trap_energy(kelvin, truth * np.exp(0.04 * rng.standard_normal(3)), np.full(3, 0.04))
        for _ in range(400)
    ]
    z = [(e.energy - 0.3) / e.standard_uncertainty for e in found]
    assert abs(np.mean(z)) < 5 / 20
    assert np.std(z) == pytest.approx(1, abs=0.2)
    logs = [np.log(e.cross_section / 5e-15) / e.cross_section_relative for e in found]
    assert np.std(logs) == pytest.approx(1, abs=0.2)


def test_candidates_are_ordered_by_distance_and_none_is_chosen():
    named = candidates(0.44, 0.01)
    assert [name for name, _ in named[:2]] == ["Si-E (P-V)", "VV(-/0)"]
    assert len(named) == 5
    assert all(near[1] <= far[1] for near, far in pairwise(named))


def without(*kinds):
    bench = plan(temperatures=(-110.0,), times=TIMES[:4])
    return replace(bench, stacks=tuple(s for s in bench.stacks if s.kind not in kinds))


@pytest.mark.parametrize(
    "model, bench, sentence",
    [
        (MODEL, without("pump"), "needs frames of kind pump"),
        (MODEL, without("flat"), "three or more flats without pumping"),
        (MODEL, plan(temperatures=(-110.0,), times=TIMES[:2]), "needs 3 or more phase times"),
        (
            replace(MODEL, traps=(), sensor=Sensor(technology="cmos", pixel_pitch=5.0)),
            without("pump"),
            "does not apply to a CMOS sensor",
        ),
    ],
)
def test_what_is_missing_is_said(model, bench, sentence):
    with pytest.raises(NotMeasured, match=sentence):
        inspected(model, bench)
