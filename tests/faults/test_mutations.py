"""Real and simulated frames and recipes with bytes flipped: a sentence or a result, never a crash.

Each case is bounded in time by an alarm and the whole run in memory by a limit on the process.
Set SENSORGRADE_REAL_FRAMES to take real frames among the seeds.
"""

import gzip
import os
import resource
import signal
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import numpy as np
import pytest
import tifffile
from astropy.io import fits

from faults.small_sensors import write_recipe, write_sensor
from frames.recipes import recipe_with
from frames.written import write_fits
from recipe.vocabulary_for_tests import VOCABULARY
from sensorgrade.errors import DeviceError, RequestError
from sensorgrade.frames.inventory import find_devices
from sensorgrade.inspection import inspect_device
from sensorgrade.masters.check import checked
from sensorgrade.recipe.load import load_recipe
from sensorgrade.recipe.model import RawBinary
from sensorgrade.stages import vocabulary

LONGEST = 5  # s
MOST_MEMORY = 1 << 30  # bytes, resident
REAL = os.environ.get("SENSORGRADE_REAL_FRAMES")
RECIPE_FOLDER = Path(__file__).parents[2] / "recipes"


@contextmanager
def bounded() -> Iterator[None]:
    """Fail a case that takes longer than `LONGEST`."""

    def too_long(signum: int, frame: object) -> None:
        raise AssertionError(f"took more than {LONGEST} s")

    before = signal.signal(signal.SIGALRM, too_long)
    signal.alarm(LONGEST)
    try:
        yield
    finally:
        signal.alarm(0)
        signal.signal(signal.SIGALRM, before)


def seeds(folder: Path) -> dict[str, bytes]:
    """Healthy files of every form that is read, by name."""
    image = np.random.default_rng(0).normal(1000, 5, (40, 48)).astype(np.uint16)
    write_fits(folder / "a.fits", image, IMAGETYP="bias", EXPTIME=0.0)
    write_fits(folder / "b.fits", image.astype(np.int32), IMAGETYP="bias", EXPTIME=0.0)
    primary = fits.PrimaryHDU()
    primary.header["IMAGETYP"] = "bias"
    unit = fits.CompImageHDU(image, compression_type="RICE_1")
    fits.HDUList([primary, unit]).writeto(folder / "c.fits.fz")
    unit = fits.CompImageHDU(image, compression_type="GZIP_2")
    fits.HDUList([primary, unit]).writeto(folder / "d.fits.fz")
    fits.HDUList([primary, fits.ImageHDU(image, name="A")]).writeto(folder / "e.fits")
    described = {"description": "IMAGETYP = bias", "metadata": None}
    tifffile.imwrite(folder / "f.tif", image, **described)
    tifffile.imwrite(folder / "g.tif", image, compression="zlib", **described)
    np.save(folder / "h.npy", image)
    (folder / "i.raw").write_bytes(image.tobytes())
    (folder / "j.fits.gz").write_bytes(gzip.compress((folder / "a.fits").read_bytes()))
    files = {path.name: path.read_bytes() for path in sorted(folder.iterdir())}
    if REAL is not None:
        real = sorted(Path(REAL).rglob("*.fits"))[0].read_bytes()
        files["real.fits"] = real
    return files


def mutated(content: bytes, rng: np.random.Generator) -> bytes:
    """Bytes flipped, cut, repeated or replaced by telling ones, mostly near the start."""
    data = bytearray(content)
    for _ in range(int(rng.integers(1, 9))):
        reach = len(data) if rng.random() < 0.3 else min(len(data), 3000)
        at = int(rng.integers(0, max(reach, 1)))
        match rng.integers(0, 6):
            case 0:
                data[at : at + 1] = bytes([int(rng.integers(0, 256))])
            case 1 if data:
                data[min(at, len(data) - 1)] ^= 1 << int(rng.integers(0, 8))
            case 2:
                del data[at : at + int(rng.integers(1, 200))]
            case 3:
                data[at:at] = data[at : at + int(rng.integers(1, 200))]
            case 4:
                telling = [b"9", b"-", b"0", b"T", b"'", b"\xff\xff\xff\xff", b"1E9", b" ", b"\0"]
                new = telling[int(rng.integers(0, len(telling)))]
                data[at : at + len(new)] = new
            case _ if rng.random() < 0.1:
                del data[at:]
    return bytes(data)


def numbers(count: int, *, always: int = 250) -> list[object]:
    """Case numbers in runs of 50: a few always, the rest only nightly."""
    runs = [range(start, start + 50) for start in range(0, count, 50)]
    return [
        pytest.param(
            run, marks=[pytest.mark.nightly] if run.start >= always else [], id=str(run[0])
        )
        for run in runs
    ]


@pytest.fixture(scope="module")
def healthy(tmp_path_factory: pytest.TempPathFactory) -> dict[str, bytes]:
    return seeds(tmp_path_factory.mktemp("seeds"))


@pytest.mark.parametrize("run", numbers(15_000))
def test_frames_with_bytes_changed_never_crash(tmp_path, healthy, run):
    names = list(healthy)
    rules = {"sorted_by": "name", "pattern": "(?P<kind>[a-z]+)_"}
    rules["kinds"] = {name.partition(".")[0]: "bias" for name in names}
    raw = RawBinary(dtype="uint16", rows=40, columns=48)
    recipe = recipe_with(raw=raw, **rules)
    for number in run:
        rng = np.random.default_rng(number)
        name = names[number % len(names)]
        folder = tmp_path / str(number)
        folder.mkdir()
        content = mutated(healthy[name], rng)
        stem, _, suffix = name.partition(".")
        path = folder / f"{stem}_{number}.{suffix}"
        path.write_bytes(content)
        with bounded():
            try:
                for one in checked([folder], recipe):
                    assert one.device.stacks or one.device.findings
            except RequestError as error:
                assert str(error).isprintable()
        path.unlink()
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * 1024
    assert peak < MOST_MEMORY


@pytest.mark.parametrize("run", numbers(5_000))
def test_recipes_with_bytes_changed_never_crash(tmp_path, run):
    texts = [path.read_bytes() for path in sorted(RECIPE_FOLDER.glob("*.yaml"))]
    path = tmp_path / "recipe.yaml"
    for number in run:
        rng = np.random.default_rng(10**6 + number)
        path.write_bytes(mutated(texts[number % len(texts)], rng))
        with bounded():
            try:
                load_recipe(path, VOCABULARY)
            except RequestError as error:
                assert all(line.isprintable() for line in str(error).splitlines())


@pytest.mark.parametrize("run", numbers(600, always=50))
def test_inspections_of_frames_with_bytes_changed_never_crash(tmp_path, run):
    """The frames that a look lets through go on to masters, measurements and defects."""
    folder = write_sensor(tmp_path / "S0", "S0")
    recipe = load_recipe(write_recipe(tmp_path / "recipe.yaml"), vocabulary())
    paths = sorted(folder.iterdir())
    usual = {path: path.read_bytes() for path in paths}
    for device in find_devices([folder], recipe):
        inspect_device(device, recipe)  # compiled code is there from here on
    for number in run:
        rng = np.random.default_rng(2 * 10**6 + number)
        chosen = [paths[at] for at in rng.integers(0, len(paths), int(rng.integers(1, 4)))]
        for path in chosen:
            path.write_bytes(mutated(usual[path], rng))
        with bounded():
            try:
                for device in find_devices([folder], recipe):
                    made = inspect_device(device, recipe)
                    assert made.result.graded.decision in ("accept", "reject", "undecided")
            except (DeviceError, RequestError) as error:
                assert str(error).isprintable()
        for path in chosen:
            path.write_bytes(usual[path])
    assert resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * 1024 < MOST_MEMORY
