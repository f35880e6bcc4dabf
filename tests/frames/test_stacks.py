import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from sensorgrade.frames.arrays import frame_from_array
from sensorgrade.frames.sources import natural
from sensorgrade.frames.stacks import stacks
from sensorgrade.recipe.model import FrameRules

RULES = FrameRules()
IMAGE = np.zeros((4, 6), np.uint16)


def frame(kind, name="f", image=IMAGE, **known):
    return frame_from_array(image, kind=kind, name=name, **known)


def found(frames, rules=RULES):
    return [(stack.name, len(stack.frames)) for stack in stacks(frames, rules)[0]]


def test_frames_taken_alike_are_one_stack():
    frames = [frame("bias", exposure=0.0), frame("bias", exposure=0.001)]
    frames += [frame("dark", exposure=e) for e in (10.0, 10.04, 20.0)]
    frames += [frame("flat", exposure=1.0, wavelength=w) for w in ("550", "650", "550")]
    assert found(frames) == [
        ("bias", 2),
        ("dark, 10 s", 2),
        ("dark, 20 s", 1),
        ("flat, 1 s, 550", 2),
        ("flat, 1 s, 650", 1),
    ] or found(frames)[1][0].startswith("dark, 10.02 s")


def test_temperatures_split_darks_beyond_the_tolerance():
    frames = [frame("dark", exposure=1.0, temperature=t) for t in (-20.0, -19.0, -10.0, -9.5)]
    assert [len(s.frames) for s in stacks(frames, RULES)[0]] == [2, 2]
    assert [s.temperature for s in stacks(frames, RULES)[0]] == [-19.5, -9.75]


def test_levels_and_pumping_times_split():
    frames = [frame("flat", exposure=1.0, level=v) for v in (1.0, 1.001, 2.0)]
    frames += [frame("pump", cycles=100, phase_time=t) for t in (1.0, 1.0, 5.0)]
    assert [len(s.frames) for s in stacks(frames, RULES)[0]] == [2, 1, 2, 1]


def test_frames_stand_in_order_of_time():
    frames = [frame("bias", name=n, time=t) for n, t in (("a", 3.0), ("b", 1.0), ("c", 2.0))]
    assert [f.label for f in stacks(frames, RULES)[0][0].frames] == ["b", "c", "a"]


def test_without_all_times_frames_stand_in_natural_order_of_name():
    frames = [frame("bias", name=n, time=t) for n, t in (("f10", 1.0), ("f9", None), ("f1", 9.0))]
    assert [f.label for f in stacks(frames, RULES)[0][0].frames] == ["f1", "f9", "f10"]


@pytest.mark.parametrize(
    "other", [np.zeros((6, 4), np.uint16), np.zeros((4, 6), np.float32), np.zeros((2, 6), np.uint8)]
)
def test_a_frame_of_another_form_is_left_out_and_named(other):
    frames = [frame("bias"), frame("bias"), frame("flat", name="odd.fits", image=other)]
    kept, (finding,) = stacks(frames, RULES)
    assert [s.kind for s in kept] == ["bias"]
    assert (finding.severity, finding.where) == ("error", "odd.fits")
    assert "the device's other frames are 4 x 6 uint16" in finding.seen


def test_no_frames_make_no_stacks():
    assert stacks([], RULES) == ((), ())


@given(st.permutations(range(8)))
def test_the_order_in_which_files_were_found_does_not_count(order):
    frames = [
        frame("dark", name=f"d{n}", exposure=[1.0, 1.004, 1.008, 2.0][n % 4], temperature=n * 0.7)
        for n in range(8)
    ]
    expected = stacks(frames, RULES)
    assert stacks([frames[n] for n in order], RULES) == expected


@given(st.lists(st.text("f019.", max_size=6), unique=True, max_size=8))
def test_natural_order_does_not_hang_on_the_order_found(names):
    backwards = names[::-1]
    assert sorted(names, key=natural) == sorted(backwards, key=natural)


def test_numbers_in_names_count_as_numbers():
    names = ["f10.fits", "f9.fits", "F1", "f", "f009.fits", "9", "10a2", "10a10"]
    expected = ["9", "10a2", "10a10", "F1", "f", "f009.fits", "f9.fits", "f10.fits"]
    assert sorted(names, key=natural) == expected
