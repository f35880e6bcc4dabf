import pickle

import numpy as np
import pytest
from numpy.testing import assert_array_equal

from sensorgrade.errors import FrameError
from sensorgrade.frames.arrays import frame_from_array
from sensorgrade.frames.native import native, native_type


@pytest.mark.parametrize(
    ("stored", "expected"),
    [("u1", "uint16"), (">u2", "uint16"), ("i2", "float32"), (">i4", "float32"), ("f8", "float32")],
)
def test_samples_become_unsigned_16_where_every_value_fits(stored, expected):
    plane = frame_from_array(np.array([[1, 2, 3]], dtype=stored), kind="bias").planes[""]
    assert plane.dtype == expected == str(plane.data.dtype) == native_type(stored)
    assert plane.data.dtype.isnative
    assert_array_equal(plane.data, [[1, 2, 3]])
    assert plane.shape == (1, 3)


def test_offset_of_unsigned_16_is_exact_at_both_ends():
    stored = np.array([-32768, -1, 0, 32767], dtype=">i2")
    values = native(stored, zero=32768)
    assert values.dtype == np.uint16
    assert_array_equal(values, [0, 32767, 32768, 65535])


def test_other_offsets_are_taken_literally():
    stored = np.array([-32768, 0, 32767], dtype=">i2")
    assert_array_equal(native(stored, zero=-32768), np.float32([-65536, -32768, -1]))
    assert_array_equal(native(stored, scale=0.5), np.float32([-16384, 0, 16383.5]))


def test_what_was_known_of_the_exposure_is_kept():
    frame = frame_from_array(
        np.zeros((2, 3), np.uint16), kind="dark", exposure=10.0, temperature=-20.0, name="d1"
    )
    assert (frame.kind, frame.exposure, frame.temperature) == ("dark", 10.0, -20.0)
    assert frame.label == "d1"
    assert pickle.loads(pickle.dumps(frame)) == frame


def test_outputs_kept_apart_are_keyed_by_extension():
    left = np.zeros((2, 3), np.uint16)
    frame = frame_from_array({"LEFT": left, "RIGHT": left + 1}, kind="flat")
    assert list(frame.planes) == ["LEFT", "RIGHT"]
    assert frame.planes["RIGHT"].data[0, 0] == 1


@pytest.mark.parametrize("shape", [(3,), (2, 2, 2), (0, 4)])
def test_only_images_become_frames(shape):
    with pytest.raises(FrameError, match="rows and columns"):
        frame_from_array(np.zeros(shape, np.uint16), kind="bias")


def test_unknown_kind_names_the_kinds_there_are():
    with pytest.raises(FrameError, match="'light' is not one of bias, dark, flat"):
        frame_from_array(np.zeros((2, 2), np.uint16), kind="light")
