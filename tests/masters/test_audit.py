"""Every kind of finding is made from a healthy set, and healthy sets raise none."""

from dataclasses import replace

import numpy as np
import pytest

from masters.audit_sets import MODELS, healthy
from sensorgrade.frames.arrays import frame_from_array
from sensorgrade.frames.geometry import geometry
from sensorgrade.frames.stacks import stacks
from sensorgrade.masters.audit import audited
from sensorgrade.recipe.model import FrameRules, Sensor


@pytest.fixture(scope="module")
def sets():
    return {kind: healthy(kind, 0) for kind in MODELS}


def images_of(device):
    return [[frame.planes[""].data.copy() for frame in stack.frames] for stack in device.stacks]


def with_images(device, change):
    """The device after ``change(stack number, frame number, image)`` of every frame's samples."""
    made = []
    for number, stack in enumerate(device.stacks):
        frames = tuple(
            replace(
                frame,
                planes=frame_from_array(
                    change(number, index, frame.planes[""].data.copy()), kind=frame.kind
                ).planes,
            )
            for index, frame in enumerate(stack.frames)
        )
        made.append(replace(stack, frames=frames))
    return replace(device, stacks=tuple(made))


def number_of(device, kind, least=3):
    """Number of the last stack of a kind with at least so many frames."""
    return [n for n, s in enumerate(device.stacks) if s.kind == kind and len(s.frames) >= least][-1]


def changed(device, kind, index, change, least=3):
    """The device with ``change(image)`` done to one frame, or to all with index None."""
    number = number_of(device, kind, least)
    return with_images(
        device,
        lambda n, i, image: change(image) if n == number and index in (i, None) else image,
    )


def findings(device, layout, sensor):
    return audited(device, layout, sensor).findings


@pytest.mark.parametrize("kind", MODELS)
@pytest.mark.parametrize("seed", range(17))
def test_healthy_sets_raise_nothing(kind, seed):
    device, layout, sensor = healthy(kind, seed)
    result = audited(device, layout, sensor)
    assert result.findings == ()
    assert result.stacks == device.stacks


def left_out(sets, kind, broken, sentence, *, count=1, layout=None):
    """Check that the frames changed, and only they, are left out with that sentence."""
    _, usual, sensor = sets[kind]
    result = audited(broken, layout or usual, sensor)
    found = [f for f in result.findings if sentence in f.seen]
    assert len(found) == count, result.findings
    assert len(result.findings) == count, result.findings
    assert all(f.severity == "error" and f.seen.endswith("it was left out") for f in found)
    assert len(result.frames) == len(broken.frames) - count
    return found


@pytest.mark.parametrize("kind", MODELS)
def test_a_bias_with_light_is_left_out(sets, kind):
    device, *_ = sets[kind]
    flat = device.stacks[number_of(device, "flat")].frames[0].planes[""].data
    broken = changed(device, "bias", 2, lambda image: flat)
    (found,) = left_out(sets, kind, broken, "kind contradicted: reads")
    assert found.undecides == ()


@pytest.mark.parametrize("kind", MODELS)
def test_biases_that_all_hold_light_are_told_by_the_darks(sets, kind):
    device, *_ = sets[kind]
    flat = device.stacks[number_of(device, "flat")].frames
    broken = with_images(
        device,
        lambda n, i, image: image + (flat[i % 5].planes[""].data // 4 if n == 0 else np.uint16(0)),
    )
    found = [f for f in findings(broken, *sets[kind][1:]) if "the bias frames read" in f.seen]
    assert len(found) == 6
    assert "read_noise" in found[0].undecides


@pytest.mark.parametrize("kind", MODELS)
def test_darks_that_are_flats_are_told_by_their_pattern(sets, kind):
    device, *_ = sets[kind]
    extra = healthy(kind, 0)[0].stacks[number_of(device, "flat")].frames
    dark = number_of(device, "dark")
    noise = np.random.default_rng(8)
    broken = with_images(
        device,
        lambda n, i, image: (
            extra[i].planes[""].data + noise.integers(0, 2, image.shape, dtype=np.uint16)
            if n == dark
            else image
        ),
    )
    found = [f for f in findings(broken, *sets[kind][1:]) if "holds the pattern" in f.seen]
    assert len(found) == 3


@pytest.mark.parametrize("kind", MODELS)
def test_a_dark_that_is_a_flat_is_left_out(sets, kind):
    device, *_ = sets[kind]
    flat = device.stacks[number_of(device, "flat")].frames[0].planes[""].data
    broken = changed(device, "dark", 1, lambda image: flat + np.uint16(1))
    left_out(sets, kind, broken, "kind contradicted: reads")


@pytest.mark.parametrize("kind", MODELS)
def test_a_light_leak_undecides_the_dark_current(sets, kind):
    device, layout, sensor = sets[kind]
    leak = np.zeros(layout.raw_shapes[""])
    leak[:, : layout.shape[1]] = np.linspace(0, 60, layout.shape[1])
    broken = changed(device, "dark", None, lambda image: (image + leak).astype(np.uint16))
    (found,) = findings(broken, layout, sensor)
    assert found.seen.startswith("light leak or glow: the dark rises by")
    assert {"dark_current", "dsnu", "hot_pixels"} <= set(found.undecides)


@pytest.mark.parametrize("kind", MODELS)
def test_flats_without_light_are_left_out(sets, kind):
    device, *_ = sets[kind]
    bias = images_of(device)[0]
    flat = number_of(device, "flat")
    broken = with_images(
        device, lambda n, i, image: bias[i] + np.uint16(i % 2) if n == flat else image
    )
    broken = with_images(broken, lambda n, i, image: np.flipud(image) if n == -1 else image)
    result = findings(broken, *sets[kind][1:])
    found = [f for f in result if "this flat holds" in f.seen or "identical" in f.seen]
    assert len(found) == 5


def test_no_flat_with_light_undecides_what_flats_are_for(sets):
    device, layout, sensor = sets["ccd"]
    rng = np.random.default_rng(6)
    broken = with_images(
        device,
        lambda n, i, image: (
            np.rint(rng.normal(1000, 4, image.shape)).astype(np.uint16)
            if device.stacks[n].kind == "flat"
            else image
        ),
    )
    result = findings(broken, layout, sensor)
    assert {f.seen for f in result} == {
        "kind contradicted: none of the flats holds light; it was left out"
    }
    assert "prnu" in result[0].undecides


@pytest.mark.parametrize("kind", MODELS)
def test_a_flat_with_the_lamp_out_of_line_is_left_out(sets, kind):
    device, *_ = sets[kind]
    zero = float(np.median(device.frames[0].planes[""].data))
    broken = changed(
        device, "flat", 3, lambda image: (zero + (image - zero) * 0.3).clip(0).astype(np.uint16)
    )
    left_out(sets, kind, broken, "lamp out of line: holds 0.3")


def test_a_pair_that_does_not_match_is_left_out(sets):
    device, *_ = sets["ccd"]
    pair = next(n for n, s in enumerate(device.stacks) if s.kind == "flat" and s.exposure > 1.7)
    broken = with_images(
        device,
        lambda n, i, image: (
            (1000 + (image - 1000.0) * 0.3).clip(0).astype(np.uint16)
            if (n, i) == (pair, 1)
            else image
        ),
    )
    left_out(sets, "ccd", broken, "pair that does not match", count=2)


def test_light_that_drifts_is_told(sets):
    device, layout, sensor = sets["ccd"]
    flat = number_of(device, "flat")
    broken = with_images(
        device,
        lambda n, i, image: (
            (1000 + (image - 1000.0) * (1 - 0.05 * i)).astype(np.uint16) if n == flat else image
        ),
    )
    (found,) = [f for f in findings(broken, layout, sensor) if "missing codes" not in f.seen]
    assert found.seen.startswith("lamp out of line: the light changes by 2")
    assert found.undecides == ("linearity_error",)


@pytest.mark.parametrize("kind", MODELS)
def test_a_frame_without_variance_is_left_out(sets, kind):
    broken = changed(sets[kind][0], "dark", 1, lambda image: np.full_like(image, 77))
    left_out(sets, kind, broken, "zero variance: every sample looked at is 77 DN")


def test_samples_that_are_no_numbers_are_left_out(sets):
    device, layout, sensor = sets["ccd"]
    floats = with_images(device, lambda n, i, image: image.astype(np.float32))
    assert findings(floats, layout, sensor) == ()
    broken = changed(floats, "bias", 0, lambda image: np.where(image > 1005, np.nan, image))
    result = findings(broken, layout, sensor)
    assert [f.seen for f in result] == ["holds samples that are no numbers; it was left out"]


@pytest.mark.parametrize("kind", MODELS)
def test_the_same_frame_under_two_names_counts_once(sets, kind):
    device, *_ = sets[kind]
    first = device.stacks[number_of(device, "dark")].frames[0]
    broken = changed(device, "dark", 2, lambda image: first.planes[""].data)
    (found,) = left_out(sets, kind, broken, "identical to")
    assert first.label in found.seen


@pytest.mark.parametrize("kind", ["cmos", "colour"])
@pytest.mark.parametrize(
    ("turn", "way"),
    [
        (lambda image: image[:, ::-1], "left to right"),
        (lambda image: image[::-1], "top to bottom"),
        (lambda image: image[::-1, ::-1], "by half a turn"),
    ],
)
def test_a_mirrored_flat_is_left_out(sets, kind, turn, way):
    broken = changed(sets[kind][0], "flat", 4, turn)
    (found,) = left_out(sets, kind, broken, "mirrored against its fellow flat frames")
    assert way in found.seen


def test_a_mirrored_frame_with_overscan_is_left_out(sets):
    broken = changed(sets["ccd"][0], "flat", 4, lambda image: image[:, ::-1])
    left_out(sets, "ccd", broken, "as if it were mirrored or laid out in another way")


def test_a_set_that_is_saturated_throughout_is_told(sets):
    device, layout, sensor = sets["cmos"]
    rng = np.random.default_rng(4)
    broken = with_images(
        device,
        lambda n, i, image: (
            np.minimum(image + rng.integers(4000, 4100, image.shape), 4095).astype(np.uint16)
            if device.stacks[n].kind == "flat"
            else image
        ),
    )
    result = findings(broken, layout, sensor)
    assert "every flat is saturated" in {f.seen for f in result}
    (found,) = [f for f in result if f.seen == "every flat is saturated"]
    assert {"conversion_gain", "prnu"} <= set(found.undecides)


def test_saturated_flats_for_the_master_are_told(sets):
    device, layout, sensor = sets["cmos"]
    broken = changed(
        device, "flat", None, lambda image: np.minimum(image * 3, 4095).astype(np.uint16)
    )
    (found,) = [f for f in findings(broken, layout, sensor) if "saturated" in f.seen]
    assert "prnu" in found.undecides
    assert "conversion_gain" not in found.undecides


@pytest.mark.parametrize(("bit", "value"), [(3, 0), (6, 1)])
def test_a_stuck_bit_undecides_the_noise(sets, bit, value):
    device, layout, sensor = sets["ccd"]
    mask = np.uint16(1 << bit)
    broken = with_images(device, lambda n, i, image: image | mask if value else image & ~mask)
    result = findings(broken, layout, sensor)
    (found,) = [f for f in result if f.where == "converter"]
    assert found.seen.startswith(f"stuck bits: bit {bit} always {value} over")
    assert "read_noise" in found.undecides


def test_codes_in_steps_are_told_and_undecide_nothing(sets):
    device, layout, sensor = sets["ccd"]
    broken = with_images(device, lambda n, i, image: image & np.uint16(0xFFFC))
    (found,) = findings(broken, layout, sensor)
    assert found.seen.startswith("every code is a multiple of 4: the lowest 2 bit(s)")
    assert found.undecides == ()


def test_missing_codes_are_told(sets):
    device, layout, sensor = sets["cmos"]
    broken = with_images(
        device, lambda n, i, image: np.where(np.isin(image, (99, 103)), image + 1, image)
    )
    (found,) = findings(broken, layout, sensor)
    assert found.seen == ("missing codes: 2 codes never occur where they should, such as 99, 103")


def test_codes_past_the_converters_range_are_told(sets):
    device, layout, sensor = sets["cmos"]
    result = findings(device, layout, replace(sensor, adc_bits=11))
    (found,) = [f for f in result if f.where == "converter"]
    assert found.seen.startswith("samples reach 38")
    assert found.seen.endswith(", a converter of 11 bits ends at 2047")


def restacked(device, change):
    """The device after ``change(number, frame)`` of each frame's facts, stacked again."""
    frames = [change(n, frame) for n, frame in enumerate(device.frames)]
    found, about = stacks(frames, FrameRules())
    assert about == ()
    return replace(device, stacks=found)


def test_a_temperature_out_of_line_is_told(sets):
    device, layout, sensor = sets["ccd"]
    broken = restacked(device, lambda n, f: replace(f, temperature=28.0) if n == 8 else f)
    (found,) = findings(broken, layout, sensor)
    assert found.where == device.frames[8].label
    assert found.seen.startswith("temperature out of line: 28.0 degC, frames otherwise alike")


def test_a_clock_that_goes_back_is_told(sets):
    device, layout, sensor = sets["ccd"]
    times = [f.time for f in device.frames]
    assert findings(restacked(device, lambda n, f: f), layout, sensor) == ()
    broken = restacked(
        device, lambda n, f: replace(f, time=times[n] - 3600) if f.kind == "dark" and n > 8 else f
    )
    (found,) = findings(broken, layout, sensor)
    assert found.seen.startswith("clock going backwards: taken at 2026-01-01T")
    assert found.where == device.frames[9].label


@pytest.mark.parametrize(
    ("kind", "keep", "sentence", "name"),
    [
        ("bias", 1, "a single bias frame shows no noise", "read_noise"),
        ("dark", 2, "fewer than three darks taken alike", "hot_pixels"),
        ("flat", 1, "no two flats are taken alike", "conversion_gain"),
    ],
)
def test_too_few_frames_are_told(sets, kind, keep, sentence, name):
    device, layout, sensor = sets["ccd"]
    fewer = replace(
        device,
        stacks=tuple(
            replace(s, frames=s.frames[:keep]) if s.kind == kind else s for s in device.stacks
        ),
    )
    (found,) = findings(fewer, layout, sensor)
    assert sentence in found.seen
    assert found.undecides == (name,)


def test_a_file_that_vanished_or_shrank_is_left_out(tmp_path):
    from frames.recipes import recipe_with
    from frames.written import write_fits
    from sensorgrade.frames.inventory import find_devices

    rng = np.random.default_rng(5)
    for n in range(5):
        image = rng.normal(1000, 5, (64, 64)).astype(np.uint16)
        write_fits(tmp_path / f"b{n}.fits", image, IMAGETYP="bias", EXPTIME=0.0)
    (device,) = find_devices([tmp_path], recipe_with())
    (tmp_path / "b1.fits").unlink()
    (tmp_path / "b2.fits").write_bytes((tmp_path / "b3.fits").read_bytes()[:4000])
    layout = geometry(Sensor(technology="ccd", pixel_pitch=15.0), {"": (64, 64)})
    result = audited(device, layout, Sensor(technology="ccd", pixel_pitch=15.0))
    assert {f.where: f.seen for f in result.findings} == {
        "b1.fits": "unreadable: No such file or directory; it was left out",
        "b2.fits": "unreadable: truncated since it was first looked at; copy it again;"
        " it was left out",
    }
    assert [f.label for f in result.frames] == ["b0.fits", "b3.fits", "b4.fits"]
