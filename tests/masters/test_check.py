from dataclasses import replace

import numpy as np
import pytest

from frames.recipes import recipe_with
from frames.written import write_fits
from sensorgrade.masters.check import checked
from sensorgrade.masters.outlook import NEEDS
from sensorgrade.recipe.model import Grade, Limit, OutputOptions, Section


def put(folder, kind, count, level, **cards):
    folder.mkdir(exist_ok=True, parents=True)
    rng = np.random.default_rng(abs(hash((kind, level))) % 1000)
    for n in range(count):
        image = rng.normal(level, np.sqrt(level / 10), (48, 64)).astype(np.uint16)
        write_fits(folder / f"{kind}{level}_{n}.fits", image, IMAGETYP=kind, **cards)


def graded(*names, outputs=None):
    limits = tuple(Limit(name, "<=", 1.0, "", 1) for name in names)
    return replace(recipe_with(outputs), grades=(Grade("best", limits),))


def test_limits_are_decidable_with_the_frames_they_need(tmp_path):
    put(tmp_path, "bias", 5, 1000, EXPTIME=0.0)
    put(tmp_path, "flat", 2, 9000, EXPTIME=1.0)
    recipe = graded("read_noise", "dark_current", "linearity_error", "shininess")
    (one,) = checked([tmp_path], recipe)
    found = {outlook.name: (outlook.decidable, outlook.lacking) for outlook in one.outlooks}
    assert one.device.findings == ()
    assert found == {
        "read_noise": (True, ""),
        "dark_current": (False, "needs dark frames"),
        "linearity_error": (False, "needs flats of three or more levels"),
        "shininess": (None, ""),
    }


def test_a_finding_makes_a_limit_undecidable(tmp_path):
    put(tmp_path, "bias", 5, 1000, EXPTIME=0.0)
    put(tmp_path, "dark", 2, 1010, EXPTIME=10.0)
    (one,) = checked([tmp_path], graded("hot_pixels"))
    (outlook,) = one.outlooks
    assert outlook.decidable is False
    assert "particle events cannot be told from hot pixels" in outlook.lacking


def test_frames_of_another_layout_than_the_recipes_are_told(tmp_path):
    put(tmp_path, "bias", 3, 1000, EXPTIME=0.0)
    outputs = {"a": OutputOptions(image=Section(0, 100, 0, 100))}
    (one,) = checked([tmp_path], graded("read_noise", outputs=outputs))
    assert one.device.stacks == ()
    (finding,) = one.device.findings
    assert "[1:100,1:100] leaves the frame, which has 64 x 48 pixels" in finding.seen


def test_compressed_frames_are_looked_at_like_others(tmp_path):
    import gzip

    put(tmp_path, "bias", 3, 1000, EXPTIME=0.0)
    for path in list(tmp_path.iterdir()):
        path.with_name(f"{path.name}.gz").write_bytes(gzip.compress(path.read_bytes()))
        path.unlink()
    (one,) = checked([tmp_path], graded("bias_level"))
    assert len(one.device.frames) == 3
    assert one.outlooks[0].decidable


def test_needs_are_stated_for_names_that_limits_can_use():
    stages = pytest.importorskip("sensorgrade.stages")
    words = stages.vocabulary()
    assert set(NEEDS) <= {*words.quantities, *words.counts}
