"""The Python interface: what it names, a plugin, and the guide's blocks as they stand."""

import re
import subprocess
import sys
from dataclasses import replace

import numpy as np
import pytest

import sensorgrade
from sensorgrade.guides.topics import guide_text
from sensorgrade.simulate.demo import demo_lot, write_demo

PYTHON = re.compile(r"^```python\n(.*?)^```$", re.MULTILINE | re.DOTALL)
TOML = re.compile(r"^```toml\n(.*?)^```$", re.MULTILINE | re.DOTALL)


@pytest.fixture(scope="module")
def guided(tmp_path_factory):
    """What the guide's blocks, run one after the other, leave behind."""
    folder = tmp_path_factory.mktemp("guide")
    write_demo(demo_lot()[:1], folder / "frames")
    names = {}
    with pytest.MonkeyPatch.context() as patch:
        patch.chdir(folder)
        for block in PYTHON.findall(guide_text("python-interface")):
            exec(block, names)
        names["out"] = names["out"].resolve()
    return names


def test_every_name_is_there_and_documented():
    for name in sensorgrade.__all__:
        found = getattr(sensorgrade, name)
        assert name == "BITS" or found.__doc__, name


def test_nothing_heavy_is_imported_before_it_is_used():
    program = (
        "import sys, sensorgrade; print([m for m in ('numba', 'astropy', 'matplotlib', 'numpy')"
        " if m in sys.modules])"
    )
    found = subprocess.run(
        [sys.executable, "-c", program], capture_output=True, text=True, check=True
    )
    assert found.stdout.strip() == "[]"


def test_arrays_in_memory_are_measured(guided):
    gain = guided["gain"]
    assert abs(gain.value - 2) < 4 * gain.standard_uncertainty < 0.2


def test_a_written_inspection_has_the_mask_it_had_in_memory(guided):
    assert {path.name for path in guided["out"].iterdir()} >= {
        "result.json",
        "mask.fits",
        "master_bias.fits",
        "device.html",
        "defects.ecsv",
    }
    bits = guided["bits"]
    assert bits.dtype == np.uint16
    np.testing.assert_array_equal(guided["bad"], bits > 0)


def test_a_notebook_shows_grade_and_measurements_and_no_foreign_markup(guided):
    shown = guided["found"]._repr_html_()
    assert "conversion gain" in shown and "A-17" in shown
    hostile = replace(guided["found"].result, serial="<script>alert(1)</script>")
    assert "<script>" not in replace(guided["found"], result=hostile)._repr_html_()


def test_frames_of_a_kind_nobody_knows_are_refused():
    with pytest.raises(sensorgrade.FrameError, match="kind 'light' is not one of bias, dark"):
        sensorgrade.frame_from_array(np.zeros((4, 4)), kind="light")
    with pytest.raises(sensorgrade.RequestError, match="no frames; give those of one device"):
        recipe = sensorgrade.load_recipe("demo")
        sensorgrade.device_from_frames([], serial="A1", recipe=recipe)


def test_a_stage_from_another_package_is_known_and_runs(tmp_path, guided):
    """The guide's stage, laid out as an installed distribution that names its entry point."""
    (block,) = PYTHON.findall(guide_text("adding-a-stage"))
    (project,) = TOML.findall(guide_text("adding-a-stage"))
    (tmp_path / "bias_wander.py").write_text(block)
    found = tmp_path / "bias_wander-1.0.dist-info"
    found.mkdir()
    (found / "METADATA").write_text("Metadata-Version: 2.1\nName: bias-wander\nVersion: 1.0\n")
    group, _, rest = project.partition('[project.entry-points."')[2].partition('"]\n')
    (found / "entry_points.txt").write_text(f"[{group}]\n{rest.replace(chr(34), '')}")
    (tmp_path / "wander.yaml").write_text(
        "name: wander\nsensor: {technology: ccd, pixel_pitch: 9 um}\n"
        "stages:\n  bias_wander: {least_frames: 5}\n"
        "grades:\n  steady: {bias_wander: <= 2 DN}\n"
    )
    program = (
        "import numpy as np, sensorgrade\n"
        "recipe = sensorgrade.load_recipe('wander.yaml')\n"
        "rng = np.random.default_rng(2)\n"
        "made = [rng.normal(100, 2, (64, 64)).round().astype('u2') for _ in range(6)]\n"
        "frames = [sensorgrade.frame_from_array(one, kind='bias') for one in made]\n"
        "device = sensorgrade.device_from_frames(frames, serial='W', recipe=recipe)\n"
        "graded = sensorgrade.inspect_device(device, recipe).result.graded\n"
        "print(graded.grade, graded.decision)\n"
    )
    done = subprocess.run(
        [sys.executable, "-c", program], cwd=tmp_path, capture_output=True, text=True
    )
    assert done.stdout == "steady accept\n", done.stderr
