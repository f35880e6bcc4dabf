"""The sums of an uneven image against plain numpy."""

import numpy as np
import pytest
from numpy.testing import assert_allclose

from sensorgrade.kernels.unevenness import line_sums, scatter_sums


@pytest.mark.parametrize("relative", [False, True])
@pytest.mark.parametrize("with_base", [False, True])
@pytest.mark.parametrize("shape", [(7, 9), (70, 130)])
def test_sums_equal_plain_numpy(shape, relative, with_base):
    rng = np.random.default_rng(4)
    rows, columns = shape
    image = (1000 + 10 * rng.standard_normal(shape)).astype(np.float32)
    image[3, 5] += 500
    base = (100 + rng.standard_normal(shape)).astype(np.float32)
    basis = [np.polynomial.legendre.legvander(np.linspace(-1, 1, n), 2).T for n in shape]
    coefficients = np.array([[900.0 if with_base else 1000.0, 5, 1], [-7, 2, 0], [3, 0, 0]])
    surface = basis[0].T @ coefficients @ basis[1]
    departure = image - surface - (base if with_base else 0)
    scale = surface if relative else 1.0
    departure = departure / scale
    limit = 60.0 / (900 if relative else 1)
    kept = np.abs(departure) <= limit
    assert 0 < (~kept).sum() < kept.size / 2
    block = 4
    blocks = -(-rows // block), -(-columns // block)
    sums = [np.zeros(n) for n in (rows, rows, columns, columns, blocks, blocks)]
    single = [b.astype(np.float32) for b in basis]
    given = base if with_base else np.empty((0, 0), np.float32)
    line_sums(image, given, coefficients, *single, relative, limit, block, *sums)
    values = np.where(kept, departure, 0.0)
    tolerance = {"rtol": 1e-4, "atol": 0.02 / (900 if relative else 1)}
    for found, expected in zip(
        sums[:4], (values.sum(1), kept.sum(1), values.sum(0), kept.sum(0)), strict=True
    ):
        assert_allclose(found, expected, **tolerance)
    starts = np.arange(0, rows, block), np.arange(0, columns, block)
    for found, whole in ((sums[4], values), (sums[5], kept.astype(float))):
        expected = np.add.reduceat(np.add.reduceat(whole, starts[0], axis=0), starts[1], axis=1)
        assert_allclose(found, expected, **tolerance)

    offsets = rng.normal(0, 2, rows) / 900, rng.normal(0, 2, columns) / 900
    variance = rng.chisquare(5, shape).astype(np.float32)
    count = rng.integers(0, 9, shape).astype(np.uint16)
    other = rng.chisquare(5, shape).astype(np.float32) if with_base else given
    other_count = np.full(shape, 3, np.uint16) if with_base else np.empty((0, 0), np.uint16)
    found = scatter_sums(
        image, given, coefficients, *single, relative, limit,
        offsets[0].astype(np.float32), offsets[1].astype(np.float32),
        variance, count, other, other_count,
    )  # fmt: skip
    left = departure - offsets[0][:, None] - offsets[1]
    noise = (variance / np.maximum(count, 1) + (other / 3 if with_base else 0)) / scale**2
    kept = np.abs(left) <= limit
    expected = [kept.sum(), (left[kept] ** 2).sum(), (left[kept] ** 4).sum(), noise[kept].sum()]
    expected += [(left**2).sum(), (left**4).sum(), noise.sum()]
    assert_allclose(found, expected, rtol=1e-4)
