"""Simulated X-rays have the lines' energies, Fano's noise and clouds that lose no electron."""

import numpy as np
from numpy.testing import assert_allclose

from sensorgrade.silicon import (
    K_ALPHA_1,
    K_ALPHA_1_RATE,
    K_ALPHA_2,
    K_ALPHA_2_RATE,
    K_BETA,
    K_BETA_RATE,
    fano_factor,
    pair_energy,
)
from sensorgrade.simulate.x_rays import x_ray_charge


def test_photons_have_the_mean_and_variance_of_three_lines():
    n = 20000
    charge = x_ray_charge(
        (2000, 2000), n, temperature=-100.0, cloud=0.0, rng=np.random.default_rng(2)
    )
    energies = np.array([K_ALPHA_1.value, K_ALPHA_2.value, K_BETA.value])
    rates = np.array([K_ALPHA_1_RATE.value, K_ALPHA_2_RATE.value, K_BETA_RATE.value])
    lines = energies / pair_energy(173.15)
    mean = lines @ rates / rates.sum()
    variance = (lines - mean) ** 2 @ rates / rates.sum() + fano_factor(173.15) * mean + 1 / 12
    assert_allclose(charge.sum(dtype=float), n * mean, atol=5 * np.sqrt(n * variance))
    lone = charge[(charge > 0) & (charge < 2400)]
    assert_allclose(lone.var(dtype=float), variance, rtol=5 * 2 / np.sqrt(n))


def test_a_cloud_spreads_charge_and_loses_none():
    inner = [
        x_ray_charge((300, 300), 200, temperature=-60.0, cloud=cloud, rng=np.random.default_rng(5))
        for cloud in (0.0, 0.2)
    ]
    one, spread = inner
    assert (spread > 0).sum() > 2 * (one > 0).sum()
    assert_allclose(spread, np.rint(spread))
    assert_allclose(spread.sum(dtype=float), one.sum(dtype=float), rtol=0.02)  # edges lose some


def test_electrons_split_by_the_share_of_the_cloud_in_each_pixel():
    # Averaged over places in the pixel, a cloud of s pixels leaves a share of s sqrt(2 / pi) in
    # the two neighbours of either axis. The same seed puts the photons into the same pixels.
    one, spread = (
        x_ray_charge(
            (4000, 4000), 3000, temperature=-60.0, cloud=cloud, rng=np.random.default_rng(8)
        )
        for cloud in (0.0, 0.1)
    )
    kept = spread[one > 0].sum(dtype=float) / spread.sum(dtype=float)
    assert_allclose(1 - kept, 1 - (1 - 0.1 * np.sqrt(2 / np.pi)) ** 2, rtol=0.1)
