"""The wheel and the source distribution hold all that the program needs, away from the sources."""

import os
import subprocess
import sys
import zipfile
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[1]


def run(*words, **options):
    done = subprocess.run(words, capture_output=True, text=True, **options)
    assert done.returncode == 0, done.stderr + done.stdout
    return done.stdout


@pytest.mark.nightly
@pytest.mark.parametrize("source", ["tree", "sdist"])
def test_what_is_built_runs_the_demonstration_from_anywhere(source, tmp_path):
    built, place, elsewhere = (tmp_path / name for name in ("built", "place", "elsewhere"))
    elsewhere.mkdir()
    what = str(ROOT)
    if source == "sdist":
        run(sys.executable, "-m", "venv", tmp_path / "venv")
        python = str(tmp_path / "venv" / "bin" / "python")
        run(python, "-m", "pip", "install", "-q", "build")
        run(python, "-m", "build", "--sdist", "--outdir", built, what)
        (archive,) = built.glob("*.tar.gz")
        what = str(archive)
    run(sys.executable, "-m", "pip", "wheel", "-q", "--no-deps", "--wheel-dir", built, what)
    (wheel,) = built.glob("*.whl")
    names = zipfile.ZipFile(wheel).namelist()
    for needed in ("py.typed", "__init__.pyi", "recipes/demo.yaml", "guides/taking-frames.md"):
        assert f"sensorgrade/{needed}" in names
    assert not [name for name in names if name.startswith(("inspect/", "tests/"))]
    run(sys.executable, "-m", "pip", "install", "-q", "--no-deps", "--target", place, wheel)
    environment = {**os.environ, "PYTHONPATH": str(place)}
    where = "import sensorgrade; print(sensorgrade.__file__)"
    assert str(place) in run(sys.executable, "-c", where, cwd=elsewhere, env=environment)
    said = run(
        sys.executable, "-m", "sensorgrade", "demo", "--out", "demo", cwd=elsewhere, env=environment
    )
    assert "12 of 12 grades are what the simulated truth says" in said
