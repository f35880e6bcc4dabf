"""Sections that the frames' own headers state: DSEC1 and the like (common practice, no source)."""

import json

import numpy as np
import pytest
from astropy.io import fits

from faults.command_line import run
from faults.small_sensors import RECIPE, SECTIONS, write_recipe, write_sensor
from frames.recipes import recipe_with
from frames.written import write_fits
from sensorgrade.errors import RequestError
from sensorgrade.frames.geometry import geometry
from sensorgrade.frames.inventory import find_devices
from sensorgrade.recipe.model import HeaderSection, OutputOptions, Section, Sensor

CARDS = {
    "DSEC1": SECTIONS["left"]["image"],
    "BSEC1": SECTIONS["left"]["overscan"],
    "DSEC2": SECTIONS["right"]["image"],
    "BSEC2": SECTIONS["right"]["overscan"],
}
FROM_HEADERS = RECIPE
for _keyword, _text in CARDS.items():
    FROM_HEADERS = FROM_HEADERS.replace(f'"{_text}"', f"header {_keyword}")
DEVICE = {
    "a": OutputOptions(image=HeaderSection("DSEC1"), overscan=HeaderSection("BSEC1")),
}


def put(folder, name, **cards):
    folder.mkdir(exist_ok=True)
    image = np.random.default_rng(sum(name.encode())).normal(1000, 5, (32, 40))
    return write_fits(folder / name, image.astype(np.uint16), IMAGETYP="bias", **cards)


def test_an_inspection_finds_the_same_as_with_the_sections_in_the_recipe(tmp_path):
    write_sensor(tmp_path / "in", "S1", **CARDS)
    stated = tmp_path / "stated.yaml"
    stated.write_text(FROM_HEADERS)
    results = []
    for recipe in (write_recipe(tmp_path / "written.yaml"), stated):
        out = tmp_path / recipe.stem
        answer = run("inspect", str(tmp_path / "in"), "--recipe", str(recipe), "--out", str(out))
        assert answer.status == 0, answer.err
        results.append(json.loads((out / "S1" / "result.json").read_text()))
    assert results[0]["measurements"] == results[1]["measurements"]
    assert results[0]["defects"] == results[1]["defects"]
    assert len({one["scope"] for one in results[0]["measurements"]}) >= 2


def test_outputs_in_extensions_take_the_sections_of_their_own_headers(tmp_path):
    image = np.random.default_rng(1).normal(1000, 5, (32, 40)).astype(np.uint16)
    units = [fits.PrimaryHDU()]
    units[0].header["IMAGETYP"] = "bias"
    for name, first, place in (("A", 1, "[1:32,1:32]"), ("B", 9, "[33:64,1:32]")):
        unit = fits.ImageHDU(image, name=name)
        unit.header["DATASEC"] = f"[{first}:{first + 31},1:32]"
        unit.header["DETSEC"] = place
        units.append(unit)
    fits.HDUList(units).writeto(tmp_path / "b.fits")
    stated = {"image": HeaderSection("DATASEC"), "place": HeaderSection("DETSEC")}
    outputs = {name: OutputOptions(extension=name, **stated) for name in "AB"}
    (device,) = find_devices([tmp_path], recipe_with(outputs))
    sensor = Sensor(technology="ccd", pixel_pitch=15.0, outputs=outputs)
    layout = geometry(sensor, {"A": (32, 40), "B": (32, 40)}, device.frames[0].sections)
    assert [one.image for one in layout.outputs] == [Section(0, 32, 0, 32), Section(0, 32, 8, 40)]
    assert [one.place for one in layout.outputs] == [Section(0, 32, 0, 32), Section(0, 32, 32, 64)]


@pytest.mark.parametrize(
    ("cards", "seen"),
    [
        (
            {"DSEC1": "[1:32,1:32]"},
            "its header has no BSEC1, from which the recipe takes sensor.outputs.a.overscan;"
            " it was left out",
        ),
        (
            {"DSEC1": "[32:1,1:32]", "BSEC1": "[33:40,1:32]"},
            "DSEC1 is '[32:1,1:32]', from which the recipe takes sensor.outputs.a.image; its last"
            " x lies before its first; sections are not reversed; it was left out",
        ),
        (
            {"DSEC1": 7, "BSEC1": "[33:40,1:32]"},
            "DSEC1 is '7', from which the recipe takes sensor.outputs.a.image; write four whole"
            " numbers, as in [1:512,1:1024]; it was left out",
        ),
        (
            {"DSEC1": "[1:30,1:32]", "BSEC1": "[33:40,1:32]"},
            "is 32 x 40 uint16 (rows x columns), BSEC1 [33:40,1:32], DSEC1 [1:30,1:32], the"
            " device's other frames are 32 x 40 uint16 (rows x columns), BSEC1 [33:40,1:32], DSEC1"
            " [1:32,1:32]; it was left out",
        ),
    ],
)
def test_a_frame_that_states_no_section_or_another_is_left_out(tmp_path, cards, seen):
    for number in range(3):
        put(tmp_path, f"b{number}.fits", DSEC1="[1:32,1:32]", BSEC1="[33:40,1:32]")
    put(tmp_path, "x.fits", **cards)
    (device,) = find_devices([tmp_path], recipe_with(DEVICE))
    (found,) = device.findings
    assert found.where == "x.fits"
    assert f"{found.seen}; {found.remedy}".startswith(seen)
    assert len(device.frames) == 3


def test_a_stated_section_that_leaves_the_frame_names_its_keyword():
    sensor = Sensor(technology="ccd", pixel_pitch=15.0, outputs=DEVICE)
    stated = {"": {"DSEC1": Section(0, 64, 0, 32), "BSEC1": Section(0, 32, 32, 40)}}
    with pytest.raises(RequestError) as caught:
        geometry(sensor, {"": (32, 40)}, stated)
    assert str(caught.value) == (
        "sensor.outputs.a.image: [1:32,1:64] (from DSEC1) leaves the frame, which has 40 x 32"
        " pixels (x by y)"
    )
    with pytest.raises(RequestError, match="header DSEC1, and there are no headers here"):
        geometry(sensor, {"": (32, 40)})
