"""The single pass: the same to the byte whatever the threads and bands, and equal to numpy."""

from dataclasses import fields, replace

import numpy as np
import pytest
from numpy.testing import assert_allclose

import sensorgrade.masters.reduction as reduction
from sensorgrade.frames.arrays import frame_from_array
from sensorgrade.frames.frame import DeviceFrames, Stack
from sensorgrade.frames.geometry import geometry
from sensorgrade.masters.combine import combined_masters
from sensorgrade.masters.reduction import reduce_frames
from sensorgrade.recipe.model import OutputOptions, Section, Sensor

ROWS, COLUMNS, OVER = 96, 80, 12

SENSOR = Sensor(
    technology="ccd",
    pixel_pitch=15.0,
    outputs={
        "a": OutputOptions(
            image=Section(0, ROWS, 0, 40), overscan=Section(0, ROWS, 80, 86), corner="bottom left"
        ),
        "b": OutputOptions(
            image=Section(0, ROWS, 40, 80), overscan=Section(0, ROWS, 86, 92), corner="bottom right"
        ),
    },
)


def stack(rng, kind, frames, signal=0.0, exposure=0.0, dtype=np.uint16):
    made = []
    for number in range(frames):
        image = rng.normal(1000 + 3 * number, 4, (ROWS, COLUMNS + OVER))
        image[:, :COLUMNS] += rng.normal(signal, np.sqrt(signal / 2), (ROWS, COLUMNS))
        raw = image.round().astype(dtype)
        made.append(frame_from_array(raw, kind=kind, exposure=exposure, name=f"{kind}{number}"))
    return Stack(kind=kind, frames=tuple(made), exposure=exposure)


def device(dtype=np.uint16):
    rng = np.random.default_rng(11)
    stacks = (
        stack(rng, "bias", 6, dtype=dtype),
        stack(rng, "dark", 5, signal=20.0, exposure=60.0, dtype=dtype),
        stack(rng, "flat", 4, signal=5000.0, exposure=1.0, dtype=dtype),
    )
    return DeviceFrames(serial="S", folder="S", stacks=stacks)


def layout():
    return geometry(SENSOR, {"": (ROWS, COLUMNS + OVER)})


def arrays(value, path=""):
    """Every array anywhere in a result, with its place."""
    if isinstance(value, np.ndarray):
        yield path, value
    elif isinstance(value, tuple):
        for index, item in enumerate(value):
            yield from arrays(item, f"{path}[{index}]")
    elif hasattr(value, "__dataclass_fields__") and type(value).__name__ != "Stack":
        for field in fields(value):
            yield from arrays(getattr(value, field.name), f"{path}.{field.name}")


@pytest.mark.parametrize(("threads", "band_bytes"), [(2, 1 << 22), (3, 1), (1, 100_000)])
def test_results_are_the_same_to_the_byte(monkeypatch, threads, band_bytes):
    once = dict(arrays(reduce_frames(device(), layout(), SENSOR, threads=1)))
    monkeypatch.setattr(reduction, "BAND_BYTES", band_bytes)
    again = dict(arrays(reduce_frames(device(), layout(), SENSOR, threads=threads)))
    assert once.keys() == again.keys() and len(once) > 20
    for path, array in once.items():
        assert array.tobytes() == again[path].tobytes(), path


def test_means_and_variances_are_those_of_overscan_corrected_frames():
    made = device()
    found = reduce_frames(made, layout(), SENSOR, threads=2)
    raw = np.stack([frame.planes[""].data for frame in made.stacks[0].frames]).astype(float)
    # The quarter of the overscan read first is left out: on the left for a, on the right for b.
    left = raw[:, :, :40] - raw[:, :, 81:86].mean(axis=2, keepdims=True)
    right = raw[:, :, 40:80] - raw[:, :, 86:91].mean(axis=2, keepdims=True)
    corrected = np.concatenate([left, right], axis=2)
    assert found.bias is not None
    whole = found.bias.count == 6
    assert whole.mean() > 0.999
    assert_allclose(found.bias.mean[whole], corrected.mean(axis=0)[whole], atol=2e-3)
    assert_allclose(found.bias.variance[whole], corrected.var(axis=0, ddof=1)[whole], rtol=2e-3)


def test_floating_point_frames_give_the_same_numbers():
    integer = reduce_frames(device(), layout(), SENSOR, threads=1)
    floating = reduce_frames(device(np.float32), layout(), SENSOR, threads=1)
    assert integer.bias is not None and floating.bias is not None
    assert_allclose(integer.bias.mean, floating.bias.mean, atol=1e-4)
    assert_allclose(integer.pairs[0].var_a, floating.pairs[0].var_a, rtol=1e-5)


def test_pair_variance_holds_the_noise_of_single_samples():
    found = reduce_frames(device(), layout(), SENSOR, threads=1)
    bias = [tiles for tiles in found.pairs if tiles.stack.kind == "bias"]
    assert [tiles.region.scope for tiles in bias] == ["output a", "output b"]
    for tiles in bias:
        variance = (tiles.var_a + tiles.var_b - 2 * tiles.cov_ab) / 2
        degrees = tiles.count.sum()
        error = 16 * np.sqrt(2 / degrees)
        assert abs(np.average(variance, weights=tiles.count) - 16 - 1 / 12) < 5 * error


def test_particles_reach_neither_master_nor_moments():
    clean, struck = device(), device()
    frames = list(struck.stacks[1].frames)
    hit = frames[2].planes[""].data.copy()
    hit[40:43, 10] += 4000
    frames[2] = replace(frames[2], planes={"": replace(frames[2].planes[""], data=hit)})
    stacks = (struck.stacks[0], replace(struck.stacks[1], frames=tuple(frames)), struck.stacks[2])
    before = reduce_frames(clean, layout(), SENSOR, threads=1)
    after = reduce_frames(replace(struck, stacks=stacks), layout(), SENSOR, threads=1)
    assert after.darks[0].events - before.darks[0].events == 3
    assert (after.darks[0].count[40:43, 10] == 4).all()
    assert abs(after.darks[0].mean[40:43, 10] - before.darks[0].mean[40:43, 10]).max() < 10


def test_masters_have_units_and_the_uncertainty_of_a_mean():
    reduced = reduce_frames(device(), layout(), SENSOR, threads=1)
    masters = combined_masters(reduced)
    assert masters.bias and masters.dark and masters.flat
    assert (masters.bias.unit, masters.dark.unit, masters.flat.unit) == ("DN", "DN", "")
    assert_allclose(np.median(masters.dark.values), 20, atol=1)
    assert_allclose(np.median(masters.flat.values), 1, atol=1e-3)
    # Scatter of the master bias is what its uncertainty says (no fixed pattern was simulated).
    assert_allclose(
        masters.bias.values.std(), np.sqrt((masters.bias.uncertainty**2).mean()), rtol=0.1
    )
