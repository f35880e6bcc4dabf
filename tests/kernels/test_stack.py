"""The pass over a band against plain numpy."""

import numpy as np
import pytest
from numpy.testing import assert_allclose

from sensorgrade.kernels.flagged import settle_flagged
from sensorgrade.kernels.overscan import overscan_means, profile_means
from sensorgrade.kernels.stack import reduce_band


def stored(values, *, swap, flip):
    """uint16 values as a file may hold them, and the masks that undo it."""
    raw = values ^ np.uint16(0x8000 if flip else 0)
    if swap:
        raw = raw.byteswap()
    frames = len(values)
    return (
        raw,
        np.full(frames, 0xFFFF * swap, np.uint16),
        np.full(frames, 0x8000 * flip, np.uint16),
    )


def reduced(raw, swap, flip, *, offset=None, scale=None, pivot=0.0, read=25.0, scatter=1e9):
    frames, rows, columns = raw.shape
    mean, variance = np.empty((2, rows, columns), np.float32)
    flagged = np.empty((rows, columns), np.uint8)
    offset = np.zeros((frames, rows), np.float32) if offset is None else offset
    scale = np.ones(frames, np.float32) if scale is None else scale
    count = reduce_band(
        raw, swap, flip, 0, offset, scale, pivot, read, 0.0, 0.0, 5.0, scatter, mean, variance,
        flagged,
    )  # fmt: skip
    return mean, variance, flagged, count


@pytest.mark.parametrize("shape", [(1, 1, 1), (2, 3, 65), (5, 4, 600), (25, 2, 1031)])
@pytest.mark.parametrize(("swap", "flip"), [(0, 0), (1, 1)])
def test_mean_and_variance_equal_plain_numpy(shape, swap, flip):
    values = np.random.default_rng(5).integers(0, 65536, shape, dtype=np.uint16)
    mean, variance, _, _ = reduced(*stored(values, swap=swap, flip=flip))
    assert_allclose(mean, values.mean(axis=0), rtol=3e-7)
    if shape[0] > 1:
        assert_allclose(variance, values.var(axis=0, ddof=1), rtol=2e-5)


def test_float_samples_take_the_same_path():
    values = np.random.default_rng(6).normal(900, 5, (7, 3, 40)).astype(np.float32)
    none = np.zeros(7, np.uint16)
    mean, variance, _, _ = reduced(values, none, none)
    assert_allclose(mean, values.mean(axis=0), rtol=1e-6)
    assert_allclose(variance, values.var(axis=0, ddof=1), rtol=1e-4)


def test_overscan_is_subtracted_and_lamp_drift_scaled_out_about_the_pivot():
    values = np.array([[[1100, 2100]], [[1090, 1990]]], np.uint16)
    offset = np.array([[100.0], [90.0]], np.float32)
    scale = np.array([1.0, 1.1], np.float32)
    mean, _, _, _ = reduced(
        *stored(values, swap=0, flip=0), offset=offset, scale=scale, pivot=500.0
    )
    # Second frame: 500 + 1.1 (1000 - 500) = 1050 and 500 + 1.1 (1900 - 500) = 2040.
    assert_allclose(mean, [[(1000 + 1050) / 2, (2000 + 2040) / 2]])


def test_only_pixels_past_the_limit_are_flagged():
    values = np.full((9, 2, 700), 1000, np.uint16)
    values[4, 1, 600] += 60
    values[::2, 0, 3] += 10
    _, _, flagged, count = reduced(*stored(values, swap=1, flip=1), read=25.0)
    assert count == 1 and flagged[1, 600] == 1
    _, _, flagged, count = reduced(*stored(values, swap=1, flip=1), read=4.0, scatter=3.0)
    assert count == 2 and flagged[0, 3] == 1


def settled(values, *, read=25.0, scatter=4.0):
    raw, swap, flip = stored(values, swap=1, flip=1)
    frames, rows, columns = values.shape
    mean, variance = np.zeros((2, rows, columns), np.float32)
    count = np.full((rows, columns), frames, np.uint16)
    places = np.zeros((rows * columns, 2), np.int32)
    samples = np.zeros((rows * columns, frames), np.float32)
    suspects, events = settle_flagged(
        raw, swap, flip, 0, np.zeros((frames, rows), np.float32), np.ones(frames, np.float32), 0.0,
        read, 0.0, 0.0, 5.0, scatter, np.ones((rows, columns), np.uint8), mean, variance, count,
        places, samples,
    )  # fmt: skip
    return mean, variance, count, suspects, events, samples


def test_a_particle_is_left_out_and_the_pixel_is_no_suspect():
    values = np.array([1000, 1004, 996, 1900, 1002, 998], np.uint16).reshape(6, 1, 1)
    mean, variance, count, suspects, events, _ = settled(values)
    rest = np.delete(values.ravel(), 3).astype(float)
    assert (count[0, 0], suspects, events) == (5, 0, 1)
    assert_allclose([mean[0, 0], variance[0, 0]], [rest.mean(), rest.var(ddof=1)], rtol=1e-6)


def test_a_pixel_that_switches_is_kept_whole_and_remembered():
    values = np.array([1000, 1003, 1100, 1098, 1001, 1102, 1099, 999], np.uint16)
    mean, _, count, suspects, events, samples = settled(values.reshape(8, 1, 1))
    assert (count[0, 0], suspects, events) == (8, 1, 0)
    assert_allclose(mean[0, 0], values.mean(), rtol=1e-6)
    assert_allclose(samples[0], values)


def test_a_noisy_pixel_does_not_lose_its_tail():
    # Against the expected 5 DN these are 8 sigma off; against the pixel's own scatter they are not.
    values = np.random.default_rng(3).normal(1000, 40, (16, 1, 200)).round().astype(np.uint16)
    _, variance, count, _, _, _ = settled(values)
    assert (count == 16).mean() > 0.99
    assert_allclose(variance.mean(), 1600, rtol=0.1)


def test_overscan_means_equal_plain_numpy():
    values = np.random.default_rng(8).integers(0, 65536, (4, 3, 50), dtype=np.uint16)
    raw, swap, flip = stored(values, swap=1, flip=1)
    out = np.empty((4, 3), np.float32)
    overscan_means(raw, swap, flip, 30, 50, out)
    assert_allclose(out, values[:, :, 30:50].mean(axis=2), rtol=1e-6)
    profile = np.empty((3, 2), np.float32)
    profile_means(raw, swap, flip, np.array([7, 31]), out, profile)
    expected = (values[:, :, [7, 31]] - out[:, :, None]).mean(axis=0)
    assert_allclose(profile, expected, rtol=1e-4, atol=0.05)
