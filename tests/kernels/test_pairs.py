"""Moments of a pair's tiles against plain numpy."""

import numpy as np
import pytest
from numpy.testing import assert_allclose

from sensorgrade.kernels.pairs import MOMENTS, line_sums, pair_tiles

TILE = 8


def moments_of(pair, *, row=0, column=0, rows=8, columns=8, step=1, last_code=65535.0):
    swap, flip = np.full(2, 0xFFFF, np.uint16), np.full(2, 0x8000, np.uint16)
    raw = (pair ^ np.uint16(0x8000)).byteswap()
    tiles = -(-columns // TILE)
    moments, saturated = np.zeros((tiles, MOMENTS)), np.zeros(tiles)
    lines = np.zeros((rows, columns), np.float32)
    pair_tiles(
        raw[0], raw[1], swap, flip, row, rows, column, columns, step, TILE, last_code, moments,
        saturated, lines,
    )  # fmt: skip
    return moments, saturated, lines


def plain(a, b):
    """The same moments of one tile, two-pass in double precision."""
    a, b = a.astype(float), b.astype(float)
    da, db = a - a.mean(), b - b.mean()
    d = da - db
    return [
        a.size, a.sum(), b.sum(), (da**2).sum(), (db**2).sum(), (da * db).sum(),
        (d[:, :-1] * d[:, 1:]).sum(), (d[:-1] * d[1:]).sum(),
        d[:, :-1].size, d[:-1].size,
    ]  # fmt: skip


@pytest.mark.parametrize(("rows", "columns"), [(8, 8), (8, 19), (3, 16), (1, 5)])
@pytest.mark.parametrize("step", [1, 2])
def test_moments_equal_plain_numpy(rows, columns, step):
    rng = np.random.default_rng(rows * columns)
    pair = rng.normal(30000, 150, (2, 20, 50)).astype(np.uint16)
    moments, saturated, lines = moments_of(
        pair, row=1, column=3, rows=rows, columns=columns, step=step
    )
    region = pair[:, 1 : 1 + rows * step : step, 3 : 3 + columns * step : step]
    for index, found in enumerate(moments):
        a, b = region[:, :, index * TILE : (index + 1) * TILE]
        assert_allclose(found, plain(a, b), rtol=2e-5, atol=1e-3 * a.size * 150)
        assert_allclose(found[:3], plain(a, b)[:3], rtol=1e-7)
        d = a.astype(float) - b
        assert_allclose(lines[:, index * TILE : (index + 1) * TILE], d - d.mean(), atol=0.01)
    assert not saturated.any()


def test_an_event_is_left_out_of_every_sum():
    rng = np.random.default_rng(1)
    pair = rng.normal(1000, 10, (2, 8, 8)).astype(np.uint16)
    pair[1, 3, 4] += 3000
    moments, _, lines = moments_of(pair)
    keep = np.ones((8, 8), bool)
    keep[3, 4] = False
    a, b = pair[0][keep].astype(float), pair[1][keep].astype(float)
    found = moments[0]
    assert found[0] == 63
    assert_allclose(found[1:3], [a.sum(), b.sum()])
    assert_allclose(found[3:5], [a.var() * 63, b.var() * 63], rtol=1e-5)
    assert (found[8], found[9]) == (8 * 7 - 2, 7 * 8 - 2)
    assert lines[3, 4] == 0


def test_saturated_samples_are_counted():
    pair = np.full((2, 8, 8), 4000, np.uint16)
    pair[0, :2] = 4095
    pair[1, 0] = 4095
    _, saturated, _ = moments_of(pair, last_code=4095.0)
    assert saturated[0] == 24


def test_line_sums_equal_plain_numpy():
    lines = np.random.default_rng(2).normal(0, 3, (5, 70)).astype(np.float32)
    row, column = np.empty(5, np.float32), np.empty(70, np.float32)
    line_sums(lines, row, column)
    assert_allclose(row, lines.sum(axis=1), atol=1e-4)
    assert_allclose(column, lines.sum(axis=0), atol=1e-4)
