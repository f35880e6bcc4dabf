"""Arithmetic of masters against plain numpy."""

import numpy as np
from numpy.testing import assert_allclose

from sensorgrade.kernels.combine import differences, divided, less_light_free, standard_errors


def test_every_loop_equals_plain_numpy():
    rng = np.random.default_rng(4)
    mean, base, dark = rng.normal(1000, 30, (3, 501)).astype(np.float32)
    variance, base_variance = rng.uniform(1, 50, (2, 501)).astype(np.float32)
    count, base_count = rng.integers(1, 30, (2, 501)).astype(np.uint16)
    values, error = np.empty((2, 501), np.float32)
    standard_errors(variance, count, error)
    assert_allclose(error, np.sqrt(variance / count), rtol=1e-6)
    differences(mean, variance, count, base, base_variance, base_count, values, error)
    assert_allclose(values, mean - base)
    assert_allclose(error, np.sqrt(variance / count + base_variance / base_count), rtol=1e-6)
    less_light_free(mean, base, dark, 0.25, values)
    assert_allclose(values, mean - base - 0.25 * dark, rtol=1e-4, atol=1e-3)
    kept = values.copy(), error.copy()
    divided(values, error, 40.0)
    assert_allclose([values, error], [kept[0] / 40, kept[1] / 40], rtol=1e-6)
