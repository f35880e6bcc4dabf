"""The guides say what is true: every block in them is run, validated or found in the package."""

import importlib
import pkgutil
import re
import shlex
from types import SimpleNamespace

import numpy as np
import pytest
from astropy.io import fits
from astropy.nddata import CCDData, StdDevUncertainty
from click.testing import CliRunner

import sensorgrade.defects
import sensorgrade.measure
from recipe.vocabulary_for_tests import VOCABULARY
from sensorgrade.cli.main import command
from sensorgrade.defects.bits import BITS
from sensorgrade.errors import NotMeasured, RequestError
from sensorgrade.guides.topics import FOLDER, TOPICS, guide_text, guide_titles
from sensorgrade.measure.stage import Stage
from sensorgrade.recipe.load import parse_limits, parse_recipe
from sensorgrade.recipe.vocabulary import Vocabulary
from sensorgrade.stages import vocabulary

BLOCK = re.compile(r"^```(\w+)\n(.*?)^```$", re.MULTILINE | re.DOTALL)


def blocks(topic, language):
    return [body for found, body in BLOCK.findall(guide_text(topic)) if found == language]


def test_every_guide_in_the_folder_is_listed_and_titled():
    assert {path.stem for path in FOLDER.glob("*.md")} == set(TOPICS)
    assert all(guide_titles().values())


def test_an_unknown_topic_gets_the_nearest():
    with pytest.raises(RequestError, match="nearest is writing-limits"):
        guide_text("writing-limit")


def test_the_command_lists_and_shows():
    listed = CliRunner().invoke(command, ["guide"])
    assert listed.exit_code == 0 and "taking-frames" in listed.output
    shown = CliRunner().invoke(command, ["guide", "writing-limits"])
    assert shown.output == guide_text("writing-limits")


def test_only_known_kinds_of_blocks_are_used():
    for topic in TOPICS:
        kinds = {language for language, _ in BLOCK.findall(guide_text(topic))}
        assert kinds <= {"sh", "python", "yaml", "toml", "text"}, topic
        assert guide_text(topic).count("```") == 2 * len(BLOCK.findall(guide_text(topic))), topic


@pytest.mark.parametrize("block", blocks("writing-limits", "yaml"))
def test_limits_shown_in_the_guide_are_right(block):
    head = (
        "name: a\nsensor: {technology: ccd, pixel_pitch: 9 um, outputs: {left: {}, right: {}}}\n"
        "stages: {read_noise: , hot_pixels: }\n"
    )
    if block.startswith("stages:"):
        recipe = parse_recipe(head.replace("hot_pixels", "pixels"), vocabulary(), path="run")
        assert parse_limits(block, vocabulary(), recipe=recipe, path="guide") != recipe
    else:
        parse_recipe(head + block, VOCABULARY, path="guide")


def test_the_mask_s_bits_are_told_as_they_are():
    rows = re.findall(
        r"^\| (\d+) \| (\d+) \| (.+?) \| (.+?) \|$", guide_text("masks-in-reduction"), re.M
    )
    told = [(int(bit), int(value), name, meaning) for bit, value, name, meaning in rows]
    assert told == [(bit.value.bit_length() - 1, bit.value, bit.name, bit.meaning) for bit in BITS]


def test_the_cautions_are_there():
    text = guide_text("taking-frames")
    for word in ("X-ray", "nitrogen", "Lasers", "High voltage", "licensed", "local rules"):
        assert word in text
    assert "safety-critical" in guide_text("writing-limits")


def commands():
    for topic in TOPICS:
        for block in (*blocks(topic, "sh"), *blocks(topic, "text")):
            for line in block.splitlines():
                if line.startswith("sensorgrade "):
                    yield topic, line


@pytest.mark.parametrize("topic, line", list(commands()))
def test_every_command_in_a_guide_exists_with_its_options(topic, line):
    words = [word for word in shlex.split(line) if word not in (">",)][1:]
    found = command
    while hasattr(found, "get_command") and words:
        try:
            found = found.get_command(None, words[0])
        except ModuleNotFoundError:
            pytest.skip(f"{words[0]} is not there yet")
        assert found is not None, line
        words = words[1:]
    names = {name for parameter in found.params for name in parameter.opts}
    assert {word for word in words if word.startswith("-")} <= {*names, "--help"}, line


def test_the_stage_of_the_guide_measures_what_it_says():
    namespace = {}
    for block in blocks("adding-a-stage", "python"):
        exec(block, namespace)
    stage = namespace["STAGE"]
    frames = np.array([[100.0, 50.0], [102.0, 50.0], [104.0, 50.0], [102.0, 50.0]])
    levels = SimpleNamespace(stack=SimpleNamespace(kind="bias"), mean=frames)
    regions = (SimpleNamespace(scope="output left"), SimpleNamespace(scope="output right"))
    reduced = SimpleNamespace(levels=(levels,), geometry=SimpleNamespace(regions=regions))
    inputs = SimpleNamespace(reduced=reduced)
    left, right = stage.run(inputs, stage.options()).measurements
    # Squares about the mean of 102: 4, 0, 4, 0; over 3; the relative doubt is 1 / sqrt(6).
    assert left.value == pytest.approx(np.sqrt(8 / 3))
    assert left.standard_uncertainty == pytest.approx(np.sqrt(8 / 3) / np.sqrt(6))
    assert (right.value, left.unit, left.scope) == (0.0, "DN", "output left")
    with pytest.raises(NotMeasured, match="needs 5 bias frames, the set has 4"):
        stage.run(inputs, stage.options(least_frames=5))
    vocabulary = Vocabulary(
        stages={stage.name: stage.options},
        quantities={one.name: one.unit for one in stage.measures},
        meanings={one.name: one.meaning for one in stage.measures},
        counts=(),
        sources={"bias_wander": ("bias_wander",)},
    )
    (block,) = blocks("adding-a-stage", "yaml")
    head = "name: a\nsensor: {technology: ccd, pixel_pitch: 9 um}\n"
    assert parse_recipe(head + block, vocabulary, path="guide").grades[0].limits[0].bound == 2.0


def test_the_masks_of_the_guide_can_be_used(tmp_path, monkeypatch):
    device = tmp_path / "lot" / "0001"
    device.mkdir(parents=True)
    bits = np.zeros((80, 80), np.uint16)
    bits[10, 10], bits[40, 40], bits[39, 42] = 1, 4, 2
    fits.PrimaryHDU(bits).writeto(device / "mask.fits")
    CCDData(
        np.ones((80, 80), np.float32),
        mask=bits != 0,
        uncertainty=StdDevUncertainty(np.full((80, 80), 0.1, np.float32)),
        unit="adu",
    ).write(device / "master_dark.fits")
    monkeypatch.chdir(tmp_path)
    namespace = {}
    for block in blocks("masks-in-reduction", "python"):
        exec(block, namespace)
    assert namespace["for_long_exposures"].sum() == 3
    assert namespace["for_short_exposures"].sum() == 1
    # Two of the three bad pixels lie inside the aperture, each takes 1 from the sum.
    assert namespace["table"]["aperture_sum"][0] == pytest.approx(np.pi * 25 - 2)


def measured():
    """Every quantity that the stages in the package measure."""
    for package in (sensorgrade.measure, sensorgrade.defects):
        for module in pkgutil.iter_modules(package.__path__):
            stage = getattr(
                importlib.import_module(f"{package.__name__}.{module.name}"), "STAGE", None
            )
            if isinstance(stage, Stage):
                yield from stage.measures


def test_every_measurement_is_explained():
    headings = re.findall(r"^### (.+)$", guide_text("measurements"), re.MULTILINE)
    explained = {name for heading in headings for name in heading.split(", ")}
    found = {quantity.name for quantity in measured()}
    assert "conversion_gain" in found
    assert found <= explained, sorted(found - explained)
