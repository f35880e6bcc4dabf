"""Counts at other thresholds, from what was kept, are those of an inspection at them."""

from dataclasses import replace

import numpy as np
import pytest

from defects.test_defects import SENSOR, measured, model
from sensorgrade.defects import pixels
from sensorgrade.defects.clusters import ClusterOptions
from sensorgrade.defects.find import find_defects
from sensorgrade.defects.lines import LineOptions
from sensorgrade.defects.ranking import RANK, ranked
from sensorgrade.defects.recount import recounted
from sensorgrade.defects.table import FINDERS
from sensorgrade.defects.telegraph import TelegraphOptions
from sensorgrade.defects.thresholds import PixelOptions
from sensorgrade.recipe.model import OutputOptions, Section, Zone
from sensorgrade.simulate.model import DefectModel

TWO = replace(
    SENSOR,
    outputs={
        "left": OutputOptions(image=Section(0, 256, 0, 128)),
        "right": OutputOptions(image=Section(0, 256, 128, 256)),
    },
)
ZONES = {"centre": Zone(circle=(128, 128, 60)), "frame": Zone(border=20)}
NAMES = [count.name for finder in FINDERS for count in finder.counts]
RECIPE = PixelOptions(hot=5.0, dim=80.0, bright=120.0, offset=60.0)
MOVED = [
    {},
    {"hot": 3.0},
    {"hot": 3.5, "warm": 2.5},
    {"hot": 9.0},
    {"hot": None},
    {"dim": 88.0, "bright": 112.0},
    {"dead": 60.0},
    {"dim": 50.0, "bright": 140.0, "hot": 2.5},
    {"offset": 45.0},
]


def sensor(seed):
    """A sensor whose dark current and response have tails, and that has every kind of defect."""
    rng = np.random.default_rng(seed)
    hot = [
        DefectModel(kind="hot", current=float(current), count=1)
        for current in 1.0 + rng.exponential(3.0, 150)
    ]
    response = [
        DefectModel(kind="dim" if share < 100 else "bright", response=float(share), count=1)
        for share in np.concatenate([rng.uniform(10, 95, 60), rng.uniform(105, 150, 40)])
    ]
    block = DefectModel(kind="hot", row=40, column=40, height=4, width=3, current=4.0)
    line = DefectModel(kind="gain", row=0, column=77, height=0, response=70.0)
    noisy = DefectModel(kind="noisy", count=8, noise=60.0)
    switching = DefectModel(kind="telegraph", count=6, amplitude=120.0)
    return model(*hot, *response, block, line, noisy, switching, sensor=TWO)


def options(of_pixels, clusters=None):
    return {
        "pixels": of_pixels,
        "lines": LineOptions(),
        "clusters": clusters or ClusterOptions(),
        "telegraph": TelegraphOptions(),
    }


@pytest.fixture(scope="module")
def devices():
    return [measured(sensor(seed), seed=seed)[0] for seed in (1, 2, 3)]


@pytest.fixture(scope="module")
def kept(devices):
    return [find_defects(one, options(RECIPE), ZONES).candidates for one in devices]


@pytest.mark.parametrize("moved", MOVED, ids=str)
def test_a_recount_says_what_an_inspection_at_the_thresholds_says(devices, kept, moved):
    asked = replace(RECIPE, **moved)
    found = recounted(kept, pixels=asked, clusters=ClusterOptions(), zones=ZONES, names=NAMES)
    changed = 0
    for device, recount in zip(devices, found, strict=True):
        assert recount.lacking == {}
        counts = {(one.kind, one.scope): one for one in recount.counts}
        for one in find_defects(device, options(asked), ZONES).counts:
            if "columns" in one.kind or "rows" in one.kind:
                continue
            other = counts[one.kind, one.scope]
            assert other.found == one.found, (one, other)
            assert other.expected == pytest.approx(one.expected, abs=1e-9)
            assert other.standard_uncertainty == pytest.approx(one.standard_uncertainty, abs=1e-9)
            changed += one.found
    assert changed > 100


def test_clusters_can_be_joined_otherwise(devices, kept):
    asked = ClusterOptions(distance=2, smallest=2)
    found = recounted(kept, pixels=RECIPE, clusters=asked, zones={}, names=NAMES)
    for device, recount in zip(devices, found, strict=True):
        inspected = find_defects(device, options(RECIPE, asked), {})
        for wanted in ("clusters", "hot_pixels"):
            numbers = [
                next(one.found for one in counts if (one.kind, one.scope) == (wanted, "device"))
                for counts in (inspected.counts, recount.counts)
            ]
            assert numbers[0] == numbers[1]


def test_what_was_not_kept_is_said_and_not_guessed(kept):
    (found, *_) = recounted(
        kept, pixels=replace(RECIPE, hot=1.0), clusters=ClusterOptions(), zones={}, names=NAMES
    )
    assert set(found.lacking) == {"hot_pixels", "clusters"}
    sentence = found.lacking["hot_pixels"]
    assert sentence.startswith("hot from 1 electron/s on needs the frames: it asks for pixels of")
    assert sentence.endswith("they were kept down to 1.25")


def test_where_there_are_too_many_the_farthest_are_kept(devices, monkeypatch):
    monkeypatch.setattr(pixels, "KEPT", 12)
    few = find_defects(devices[0], options(RECIPE), ZONES).candidates
    dark = few.pixels[few.pixels["part"] == 0]
    assert 12 < len(dark) <= 24
    (at_threshold,) = recounted(
        [few], pixels=RECIPE, clusters=ClusterOptions(), zones={}, names=NAMES
    )
    assert "hot_pixels" in at_threshold.lacking
    high = replace(RECIPE, hot=12.0)
    (above,) = recounted([few], pixels=high, clusters=ClusterOptions(), zones={}, names=NAMES)
    exact = find_defects(devices[0], options(high), {})
    assert "hot_pixels" not in above.lacking
    numbers = [
        next(one.found for one in counts if (one.kind, one.scope) == ("hot_pixels", "device"))
        for counts in (exact.counts, above.counts)
    ]
    assert numbers[0] == numbers[1] > 0


def test_where_very_many_pixels_stand_apart_only_what_is_needed_is_looked_at(devices, monkeypatch):
    monkeypatch.setattr(pixels, "MANY", 20)
    found = find_defects(devices[0], options(RECIPE), ZONES)
    assert found.counts == find_defects(devices[0], options(RECIPE), ZONES).counts
    reach = found.candidates.reaches[found.candidates.reaches["part"] == 0]["reach"]
    assert np.all((reach > 3.0) & (reach < 5.0))


def test_a_pixel_counts_once_and_keeps_its_chance_of_being_worse():
    kind = np.array([RANK.index(one) for one in ("warm", "hot", "hot", "warm", "hot", "dim")])
    pixel = np.array([1, 1, 2, 2, 3, 3])
    #                 sure warm, doubtful hot | sure hot, sure warm | sure hot, doubtful dim
    probability = np.array([1.0, 0.3, 0.9, 1.0, 0.8, 0.2])
    assert ranked(pixel, kind, probability).tolist() == [0, 1, 2, 4]
