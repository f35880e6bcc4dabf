"""A drafted recipe is right where the frames tell, and says so where they do not."""

import os
from pathlib import Path

import numpy as np
import pytest
from astropy.io import fits

from recipe.vocabulary_for_tests import VOCABULARY
from sensorgrade.errors import RequestError
from sensorgrade.frames.draft import drafted_recipe
from sensorgrade.frames.extension_guess import guessed_extensions
from sensorgrade.frames.geometry import geometry
from sensorgrade.frames.inventory import find_devices
from sensorgrade.frames.keyword_guess import guessed_keywords
from sensorgrade.frames.layout_guess import guessed_layout
from sensorgrade.recipe.load import parse_recipe
from sensorgrade.recipe.model import Section

ROWS, COLUMNS, OVERSCAN = 128, 256, 20


def two_outputs(rng, light):
    """A raw frame of two outputs whose overscans follow the image, left's first."""
    frame = rng.normal(1000.0, 3.0, (ROWS, COLUMNS + 2 * OVERSCAN))
    frame[:, COLUMNS // 2 : COLUMNS] += 12.0
    frame[:, COLUMNS + OVERSCAN :] += 12.0
    x = np.linspace(-1, 1, COLUMNS)
    frame[:, :COLUMNS] += light * (1 - 0.3 * x**2)  # a vignetted lamp
    return frame


def write(path, image, **header):
    path.parent.mkdir(parents=True, exist_ok=True)
    unit = fits.PrimaryHDU(np.clip(image, 0, 65535).astype(np.uint16))
    for name, value in header.items():
        unit.header[name.replace("_", "-")] = value
    unit.writeto(path)


@pytest.fixture
def folder(tmp_path):
    rng = np.random.default_rng(3)
    source = tmp_path / "dev 1"
    for n in range(3):
        write(source / f"a{n}.fits", two_outputs(rng, 0), OBSTYPE="Zero", EXPOSURE=0.0, SERNO="K7")
        write(source / f"b{n}.fits", two_outputs(rng, 0), OBSTYPE="Dark", EXPOSURE=60.0, SERNO="K7")
        write(
            source / f"c{n}.fits", two_outputs(rng, 2e4), OBSTYPE="FLAT", EXPOSURE=5.0, SERNO="K7"
        )
    write(source / "d.fits", two_outputs(rng, 2e4), OBSTYPE="arc", EXPOSURE=5.0, SERNO="K7")
    return source


def drafted(folder):
    text = drafted_recipe(folder, stages=tuple(VOCABULARY.stages))
    return text, parse_recipe(text, VOCABULARY, path="draft.yaml")


def test_a_draft_is_a_recipe_that_validates_and_names_what_it_found(folder):
    text, recipe = drafted(folder)
    assert recipe.name == "dev 1"
    assert (recipe.frames.kind, recipe.frames.exposure) == ("OBSTYPE", "EXPOSURE")
    assert recipe.frames.serial == "SERNO"
    assert recipe.frames.kinds == {"arc": "ignore"}
    assert list(recipe.stages) == list(VOCABULARY.stages)
    for line in ("#      3 bias", "#      3 dark, 60 s", "#      3 flat, 5 s"):
        assert line in text


def test_outputs_and_their_overscans_are_told_from_the_data(folder):
    outputs = drafted(folder)[1].sensor.outputs
    half = COLUMNS // 2
    assert list(outputs) == ["left", "right"]
    assert outputs["left"].image == Section(0, ROWS, 0, half)
    assert outputs["right"].image == Section(0, ROWS, half, COLUMNS)
    assert outputs["left"].overscan == Section(0, ROWS, COLUMNS, COLUMNS + OVERSCAN)
    assert outputs["right"].overscan == Section(0, ROWS, COLUMNS + OVERSCAN, COLUMNS + 2 * OVERSCAN)
    assert (outputs["left"].corner, outputs["right"].corner) == ("bottom left", "bottom right")


def test_overscans_that_cross_over_go_to_the_output_of_their_level():
    rng = np.random.default_rng(4)
    dark = two_outputs(rng, 0)
    dark[:, COLUMNS:] = np.roll(dark[:, COLUMNS:], OVERSCAN, axis=1)
    lit = dark.copy()
    lit[:, :COLUMNS] += 9000
    outputs = guessed_layout(dark, lit).outputs
    assert outputs["right"].overscan == Section(0, ROWS, COLUMNS, COLUMNS + OVERSCAN)


def test_one_output_without_overscan_needs_no_sections():
    dark = np.random.default_rng(5).normal(500, 3, (ROWS, COLUMNS))
    assert guessed_layout(dark, dark + 8000).outputs == {}


def test_a_gradient_or_a_bad_column_is_not_an_output():
    dark = np.random.default_rng(6).normal(500, 3, (ROWS, COLUMNS)) + np.arange(COLUMNS) * 0.2
    dark[:, COLUMNS // 2] += 500
    lit = dark + 8000
    lit[:, 40] = dark[:, 40]  # a dead column is no overscan
    assert guessed_layout(dark, lit).outputs == {}


def test_prescan_and_parallel_overscan_of_one_output():
    dark = np.random.default_rng(7).normal(500, 3, (ROWS + 10, COLUMNS + 30))
    lit = dark.copy()
    lit[:ROWS, 6 : COLUMNS + 6] += 5000
    (output,) = guessed_layout(dark, lit).outputs.values()
    assert output.image == Section(0, ROWS, 6, COLUMNS + 6)
    assert output.prescan == Section(0, ROWS, 0, 6)
    assert output.overscan == Section(0, ROWS, COLUMNS + 6, COLUMNS + 30)
    assert output.parallel_overscan == Section(ROWS, ROWS + 10, 6, COLUMNS + 6)


def test_four_outputs_with_overscan_in_the_middle():
    rng = np.random.default_rng(8)
    dark = rng.normal(500, 3, (ROWS, COLUMNS))
    dark[: ROWS // 2] += 9
    dark[:, COLUMNS // 2 :] += 20
    lit = dark.copy()
    lit[:, : COLUMNS // 2 - 10] += 5000
    lit[:, COLUMNS // 2 + 10 :] += 5000
    outputs = guessed_layout(dark, lit).outputs
    assert set(outputs) == {"bottom left", "bottom right", "top left", "top right"}
    middle = Section(ROWS // 2, ROWS, COLUMNS // 2, COLUMNS // 2 + 10)
    assert outputs["top right"].overscan == middle
    assert outputs["top right"].corner == "top right"


@pytest.mark.parametrize("cell", ["RGGB", "BGGR", "GRBG", "GBRG"])
@pytest.mark.parametrize("shape", [(64, 64), (66, 90)])
def test_a_mosaic_under_a_warm_lamp_is_named(cell, shape):
    dark = np.random.default_rng(9).normal(500, 3, shape)
    lit = dark.copy()
    for index, letter in enumerate(cell):
        lit[index // 2 :: 2, index % 2 :: 2] += {"R": 7000, "G": 9000, "B": 4000}[letter]
    assert guessed_layout(dark, lit).colour == cell
    assert guessed_layout(dark, dark + 8000).colour == "none"


def test_names_tell_the_kind_where_headers_do_not(tmp_path):
    rng = np.random.default_rng(10)
    for n in range(2):
        write(tmp_path / f"s_bias_{n}.fits", rng.normal(500, 3, (64, 64)))
        write(tmp_path / f"s_dark_{n}_60s.fits", rng.normal(500, 3, (64, 64)))
        write(tmp_path / f"s_flat_{n}_2.5s.fits", rng.normal(8000, 9, (64, 64)))
    recipe = drafted(tmp_path)[1]
    assert recipe.frames.sorted_by == "name"
    (device,) = find_devices((tmp_path,), recipe)
    assert [stack.name for stack in device.stacks] == ["bias", "dark, 60 s", "flat, 2.5 s"]
    assert all(len(stack.frames) == 2 for stack in device.stacks)


def test_folders_tell_the_kind_and_headers_the_exposure(tmp_path):
    rng = np.random.default_rng(10)
    for kind, seconds in (("Dark", 60.0), ("FLATS", 2.0)):
        for n in range(2):
            image = rng.normal(500, 3, (64, 64))
            write(tmp_path / kind / f"frame_{n}.fits", image, EXPTIME=seconds)
    recipe = drafted(tmp_path)[1]
    (device,) = find_devices((tmp_path,), recipe)
    assert [stack.name for stack in device.stacks] == ["dark, 60 s", "flat, 2 s"]


def test_a_drafted_recipe_sorts_the_frames_it_was_drafted_from(folder):
    (device,) = find_devices((folder,), drafted(folder)[1])
    assert device.serial == "K7"
    assert [len(stack.frames) for stack in device.stacks] == [3, 3, 3]


def test_the_converter_s_bits_are_stated_only_where_its_last_code_is_reached(tmp_path):
    image = np.random.default_rng(11).normal(3000, 900, (64, 64))
    write(tmp_path / "flat.fits", np.clip(image, 0, 4095), IMAGETYP="flat", EXPTIME=1.0)
    assert drafted(tmp_path)[1].sensor.adc_bits == 12
    write(tmp_path / "flat2.fits", np.clip(image, 0, 3000), IMAGETYP="flat", EXPTIME=1.0)
    (tmp_path / "flat.fits").unlink()
    text, recipe = drafted(tmp_path)
    assert recipe.sensor.adc_bits is None and "largest code found is 3000" in text


def test_frames_of_another_shape_and_damaged_files_are_told(folder):
    write(folder / "z.fits", np.zeros((9, 9)), OBSTYPE="Zero", EXPOSURE=0.0)
    (folder / "y.fits").write_bytes(b"no fits")
    text = drafted(folder)[0]
    assert "CHECK: 1 frames have 9 x 9 pixels" in text
    assert "y.fits" in text


def test_a_folder_without_frames_is_refused(tmp_path):
    with pytest.raises(RequestError, match="no frames were found in it to draft a recipe from"):
        drafted_recipe(tmp_path, stages=())


def test_a_hostile_folder_name_cannot_break_the_recipe(tmp_path):
    source = tmp_path / "a\n'b: {x"
    write(source / "bias.fits", np.zeros((16, 16)), IMAGETYP="bias'\\", FILTER="#: '")
    _, recipe = drafted(source)
    assert recipe.name == "a\\u000a'b: {x"


def test_keywords_are_chosen_by_what_their_values_say():
    frames = [{"OBJECT": "Vega", "IMAGETYP": "bias", "EXPTIME": 3, "EXPOSURE": "long"}] * 3
    assert guessed_keywords(frames) == {"kind": "IMAGETYP", "exposure": "EXPTIME"}


@pytest.mark.skipif("SENSORGRADE_REAL_FRAMES" not in os.environ, reason="no real frames given")
def test_a_real_folder_is_understood():
    # Stated with the frames: 1536 x 1024, 10 um pixels, one output, no overscan, no darks.
    (source,) = [
        path for path in Path(os.environ["SENSORGRADE_REAL_FRAMES"]).iterdir() if path.is_dir()
    ]
    text, recipe = drafted(source)
    assert recipe.sensor.pixel_pitch == 10.0 and recipe.sensor.outputs == {}
    assert recipe.sensor.colour == "none"
    assert recipe.frames.temperature == "CCD-TEMP" and recipe.frames.wavelength == "FILTER"
    assert "no darks" in text and "#      5 bias" in text


def test_outputs_in_extensions_are_placed_as_their_headers_say(tmp_path):
    rng = np.random.default_rng(12)
    for n, light in enumerate((0, 0, 9000, 9000)):
        units = [fits.PrimaryHDU()]
        units[0].header["IMAGETYP"] = "flat" if light else "bias"
        units[0].header["EXPTIME"] = 3.0
        for name, place in (("AMP1", "[1:64,1:48]"), ("AMP2", "[128:65,1:48]")):
            image = rng.normal(500, 3, (48, 72))
            image[:, :64] += light
            unit = fits.ImageHDU(image.astype(np.uint16), name=name)
            unit.header["DETSEC"] = place
            units.append(unit)
        fits.HDUList(units).writeto(tmp_path / f"f{n}.fits")
    text, recipe = drafted(tmp_path)
    left, right = recipe.sensor.outputs["AMP1"], recipe.sensor.outputs["AMP2"]
    assert (left.extension, right.extension) == ("AMP1", "AMP2")
    assert left.image == right.image == Section(0, 48, 0, 64)
    assert left.overscan == Section(0, 48, 64, 72)
    assert (left.place, right.place) == (Section(0, 48, 0, 64), Section(0, 48, 64, 128))
    assert "CHECK: AMP2 is stored in the order of reading" in text and "CHECK: AMP1" not in text
    (device,) = find_devices((tmp_path,), recipe)
    shapes = {key: plane.shape for key, plane in device.frames[0].planes.items()}
    assert geometry(recipe.sensor, shapes).shape == (48, 128)


def test_extensions_without_a_place_are_laid_side_by_side():
    dark = np.full((20, 30), 100.0)
    guess = guessed_extensions({"1": (dark, None), "2": (dark, None)}, {"1": None, "2": "[1:5]"})
    assert [output.place for output in guess.outputs.values()] == [
        Section(0, 20, 0, 30),
        Section(0, 20, 30, 60),
    ]


@pytest.mark.parametrize("order", ["<u2", ">u2"])
@pytest.mark.parametrize("kind", ["shaded", "columns"])
@pytest.mark.parametrize("shape", [(96, 128), (128, 128), (120, 200)])
def test_the_rows_of_headerless_frames_are_found(tmp_path, order, kind, shape):
    rng = np.random.default_rng(13)
    y, x = np.mgrid[-1 : 1 : shape[0] * 1j, -1 : 1 : shape[1] * 1j]
    flat = (
        8000 * (1 - 0.2 * (x**2 + y**2)) if kind == "shaded" else 800 + rng.normal(0, 9, shape[1])
    )
    for name, image in (("bias", 0 * x + 500), ("flat", flat)):
        noisy = rng.normal(0, 6, shape) + image
        (tmp_path / f"{name}_1.raw").write_bytes(noisy.astype(order).tobytes())
    raw = drafted(tmp_path)[1].frames.raw
    assert (raw.rows, raw.columns) == shape
    assert raw.byte_order == ("little" if order == "<u2" else "big")


def test_nothing_is_guessed_from_headerless_noise(tmp_path):
    noise = np.random.default_rng(14).normal(500, 5, (64, 64))
    (tmp_path / "bias.raw").write_bytes(noise.astype("<u2").tobytes())
    with pytest.raises(RequestError, match=r"bias\.raw: is headerless"):
        drafted_recipe(tmp_path, stages=())
