"""Pocket pumping: the three-phase law, its maximum and windows, and energies from warmth."""

import numpy as np
import pytest
from scipy.optimize import brentq, minimize_scalar

from sensorgrade.measure.emission_fit import emission_fits, pumped_share, trap_energy

LAW = "three-phase pocket pumping law, e.g. N. J. Murray et al., Proc. SPIE 8453 (2012)"
SRH = "Shockley-Read-Hall emission, masses 1.08 and 0.26"


def test_the_law_at_round_dwell_times(outside):
    outside(
        "I / (N Pc) at t / tau = 0.05 ... 5, three phases",
        source=LAW,
        standing="derived",
        expected=[
            *(0.046392, 0.086107, 0.148411, 0.192007, 0.238651, 0.25),
            *(0.232544, 0.173343, 0.117020, 0.047308, 0.006693),
        ],
        found=pumped_share(np.array([0.05, 0.1, 0.2, 0.3, 0.5, np.log(2), 1, 1.5, 2, 3, 5]), 2.0),
        atol=5.1e-7,
    )


def test_half_of_the_maximum_is_reached_at_two_dwell_times(outside):
    found = [
        brentq(lambda x: pumped_share(x, 2.0) - 0.125, *span) for span in ((0, 0.69), (0.7, 9))
    ]
    outside(
        "t / tau of half the largest amplitude",
        source=LAW,
        standing="derived",
        expected=[0.158347, 1.921094],
        found=found,
        atol=6e-7,
    )


@pytest.mark.parametrize(
    "window, time, peak",
    [
        (2.0, 0.693147, 0.25),
        (3.0, 0.549306, 0.384900),
        (4.0, 0.462098, 0.472470),
        (8.0, 0.297063, 0.650123),
    ],
)
def test_the_best_dwell_time_of_each_window(outside, window, time, peak):
    best = minimize_scalar(
        lambda x: -float(pumped_share(x, window)), bounds=(0.01, 3), options={"xatol": 1e-10}
    )
    outside(
        f"best t / tau and its share, window of {window:g} dwell times",
        source="t / tau = ln n / (n - 1)",
        standing="derived",
        expected=[time, peak],
        found=[best.x, -best.fun],
        atol=1e-6,
    )


def test_amplitudes_of_a_worked_trap_and_its_fit(outside):
    times = np.array([20.0, 50, 69.315, 100, 200, 500])
    amplitude = [474.914, 763.684, 800.000, 744.141, 374.463, 21.416]
    outside(
        "electrons after 4000 cycles, Pc 0.8, tau 100 us, at 20 ... 500 us",
        source=LAW,
        standing="derived",
        expected=amplitude,
        found=4000 * 0.8 * pumped_share(times / 100, 2.0),
        atol=6e-4,
    )
    fits = emission_fits(
        np.array([amplitude]),
        times,
        np.full(6, 4000.0),
        np.eye(6),
        tau=np.array([40.0]),
        window=2.0,
    )
    outside(
        "tau [us] and Pc fitted to those amplitudes",
        source=LAW,
        standing="derived",
        expected=[100.0, 0.8],
        found=[fits.tau[0], fits.capture[0]],
        rtol=2e-6,
    )


def test_two_dwell_times_give_the_emission_time(outside):
    ratio = pumped_share(1.0, 2.0) / pumped_share(0.5, 2.0)
    root = (np.sqrt(1 + 4 * float(ratio)) - 1) / 2
    outside(
        "I(100 us) / I(50 us) at tau 100 us, and exp(-t / tau) from it",
        source=LAW,
        standing="derived",
        expected=[0.974410, 0.606531],
        found=[float(ratio), root],
        atol=6e-7,
    )


def test_energy_and_cross_section_from_five_temperatures(outside):
    kelvin = np.array([153.0, 158, 163, 168, 173])
    tau = np.array([95.3846, 33.4322, 12.4721, 4.92508, 2.04863])
    found = trap_energy(kelvin, tau, np.full(5, 0.01))
    outside(
        "trap energy [eV] from emission times at 153 ... 173 K",
        source=SRH,
        standing="derived",
        expected=0.410000,
        found=found.energy,
        atol=1e-6,
    )
    outside(
        "capture cross-section [cm2] from the same",
        source=SRH,
        standing="derived",
        expected=2.000e-15,
        found=found.cross_section,
        rtol=2e-3,
    )


def test_uncertainty_of_a_trap_against_fisher_s_information(outside):
    # 12 dwell times from 0.2 to 10 tau, S 5000 electron, noise sqrt((S + 25) / 2), N 4000, Pc 0.8.
    times = np.geomspace(20.0, 1000.0, 12)
    variance = (5000 + 25) / 2
    fits = emission_fits(
        4000 * 0.8 * pumped_share(times / 100, 2.0)[None, :],
        times,
        np.full(12, 4000.0),
        np.eye(12) / variance,
        tau=np.array([80.0]),
        window=2.0,
    )
    outside(
        "relative uncertainty of tau and of Pc, single trap [%]",
        source="inverse Fisher matrix of the three-phase law",
        standing="derived",
        expected=[4.3, 2.9],
        found=[100 * fits.tau_relative[0], 100 * fits.capture_uncertainty[0] / 0.8],
        atol=0.06,
    )
