import numpy as np
import pytest
from numpy.testing import assert_allclose

from grading.given import limit, measured, recipe
from sensorgrade import silicon
from sensorgrade.grading.grade import grade


def dark(value, doubt, *others, at, bound=1.0):
    asked = recipe(("a", [limit("dark_current", "<=", bound, "electron / s", temperature=at)]))
    readings = [measured("dark_current", value, doubt, unit="electron / s"), *others]
    (only,) = grade(readings, [], [], recipe=asked).limits
    return only


def temperature(celsius, doubt=0.0):
    return measured("dark_temperature", celsius, doubt, unit="deg_C")


def test_without_a_known_temperature_the_limit_is_undecided():
    found = dark(0.5, 0.01, at=-20.0)
    assert found.outcome == "undecided"
    assert "temperature of the frames is not known" in found.reason


def test_the_measured_energy_translates_with_its_uncertainty():
    energy = measured("activation_energy", 0.62, 0.02, unit="eV")
    found = dark(0.5, 0.01, temperature(-30.0, 0.5), energy, at=-20.0)
    # By simulation of the three uncertain inputs.
    rng = np.random.default_rng(3)
    value = rng.normal(0.5, 0.01, 200_000)
    first = rng.normal(-30.0, 0.5, 200_000) + 273.15
    slope = rng.normal(0.62, 0.02, 200_000)
    # Over 10 K the law's curvature changes ln D by a few thousandths.
    there = value * np.exp(slope / 8.617333e-5 * (1 / first - 1 / 253.15))
    assert_allclose(found.value, np.median(there), rtol=8e-3)
    assert_allclose(found.standard_uncertainty, there.std(), rtol=0.02)


def test_without_an_energy_silicon_gives_a_range_from_generation_to_diffusion():
    found = dark(0.5, 0.0, temperature(-30.0), at=-20.0, bound=10.0)
    generation = silicon.dark_current_ratio(253.15, 243.15)
    assert 0.5 * generation < found.value < 0.5 * generation**2
    assert found.value == pytest.approx(0.5 * generation**1.5)
    # The two extremes lie sqrt(3) standard uncertainties away, in the logarithm.
    relative = found.standard_uncertainty / found.value
    assert relative == pytest.approx(np.log(generation) / np.sqrt(12))


def test_at_its_own_temperature_a_reading_keeps_its_value():
    found = dark(0.5, 0.01, temperature(-20.0), at=-20.0)
    assert (found.value, found.standard_uncertainty) == (0.5, 0.01)


def test_what_has_no_law_is_taken_at_a_like_temperature_only():
    for at, expected in ((-21.0, "accept"), (-30.0, "undecided")):
        asked = recipe(("a", [limit("read_noise", "<=", 5.0, temperature=at)]))
        readings = [measured("read_noise", 4.0, 0.1), temperature(-20.0)]
        (only,) = grade(readings, [], [], recipe=asked).limits
        assert only.outcome == expected


def test_the_energy_of_generation_gives_generations_own_ratio():
    energy = measured("activation_energy", silicon.generation_slope(243.15), 0.0, unit="eV")
    for at in (-60.0, 0.0, 25.0):
        found = dark(0.5, 0.0, temperature(-30.0), energy, at=at, bound=100.0)
        expected = 0.5 * silicon.dark_current_ratio(at + 273.15, 243.15)
        assert found.value == pytest.approx(expected, rel=1e-9)
