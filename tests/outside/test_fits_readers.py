"""FITS as two independent libraries and the standard's worked sums see it."""

import os
from pathlib import Path

import astropy.io.fits
import fitsio
import numpy as np
import pytest

from frames.recipes import recipe_with
from frames.written import samples
from sensorgrade.frames.contents import Layout
from sensorgrade.frames.decode import read_plane
from sensorgrade.frames.fits import read_fits
from sensorgrade.frames.frame import Plane
from sensorgrade.frames.geometry import fits_section, geometry
from sensorgrade.frames.inventory import find_devices
from sensorgrade.recipe.model import OutputOptions, Section, Sensor
from sensorgrade.recipe.section import section as parsed

FITSIO = "fitsio (CFITSIO), in the same run"
DTYPES = ["u1", "i2", "u2", "i4", "u4", "i8", "f4", "f8"]


def image(dtype: str) -> np.ndarray:
    kind = np.dtype(dtype)
    generator = np.random.default_rng(11)
    if kind.kind == "f":
        return generator.normal(1000, 300, (37, 53)).astype(kind)
    limits = np.iinfo(kind)
    found = generator.integers(limits.min, limits.max, (37, 53), dtype=kind, endpoint=True)
    found[0, :2] = limits.min, limits.max
    return found


@pytest.mark.parametrize("dtype", DTYPES)
def test_samples_written_by_the_second_library_are_read_as_written(tmp_path, outside, dtype):
    path = tmp_path / "a.fits"
    fitsio.write(str(path), image(dtype))
    outside(
        f"FITS samples of type {dtype}",
        source=FITSIO,
        standing="library",
        expected=fitsio.read(str(path)).astype(np.float32),
        found=samples(path).astype(np.float32),
    )


@pytest.mark.parametrize("form", ["RICE", "GZIP", "GZIP_2", "HCOMPRESS"])
@pytest.mark.parametrize("dtype", ["i2", "u2", "i4"])
def test_tiles_compressed_by_the_second_library_are_read_as_written(tmp_path, outside, form, dtype):
    path = tmp_path / "a.fits.fz"
    written = (image(dtype).astype(np.int64) % 20000).astype(dtype)
    fitsio.write(str(path), written, compress=form)
    outside(
        f"FITS tiles compressed by {form}, type {dtype}",
        source=FITSIO,
        standing="library",
        expected=written.astype(np.float32),
        found=samples(path).astype(np.float32),
    )


@pytest.mark.parametrize("name", ["a.fits", "a.fits.gz", "a.fits.fz"])
def test_headers_written_by_the_second_library_are_read_as_written(tmp_path, name):
    path = tmp_path / name
    cards = [
        {"name": "EXPTIME", "value": 12.5},
        {"name": "IMAGETYP", "value": "Flat Field"},
        {"name": "OBSERVER", "value": "O'Neil / both"},
        {"name": "LONGTEXT", "value": "word " * 40 + "end"},
        {"name": "COOLER", "value": True},
        {"name": "CCD-TEMP", "value": -10.25},
        {"name": "NREAD", "value": 17},
    ]
    compress = {"compress": "RICE"} if name.endswith("fz") else {}
    fitsio.write(str(path), image("u2"), header=cards, **compress)
    values = read_fits(path, Layout()).values
    assert {card["name"]: values[card["name"]] for card in cards} == {
        card["name"]: card["value"] for card in cards
    }


# DATASUM of small arrays, derived from the standard's rule (FITS 4.0, 4.4.2.7 and appendix J).
@pytest.mark.parametrize(
    ("written", "expected"),
    [
        (np.array([[0, 1, 2], [32767, 32768, 65535]], np.uint16), 262144),
        (np.zeros((4, 4), np.uint8), 0),
        (np.eye(4, dtype=np.uint8), 16843009),
        (np.array([[1.5]], np.float32), 1069547520),
        (np.full((10, 10), 1000, np.uint16), 3278488425),
        (np.full((10, 10), 1000, np.int16), 3276850000),
    ],
)
def test_the_bytes_that_are_read_in_place_have_the_standards_sum(
    tmp_path, outside, written, expected
):
    path = tmp_path / "a.fits"
    astropy.io.fits.PrimaryHDU(written).writeto(path)
    plane = read_fits(path, Layout()).planes[""]
    data = path.read_bytes()[plane.offset : plane.offset + written.nbytes]
    words = np.frombuffer(data.ljust(-(-len(data) // 4) * 4, b"\0"), ">u4").astype(object)
    total = int(words.sum())
    while total >> 32:
        total = (total & 0xFFFFFFFF) + (total >> 32)
    outside(
        f"DATASUM of {written.shape[0]} x {written.shape[1]} {written.dtype}",
        source="FITS Standard 4.0, appendix J",
        standing="derived",
        expected=expected,
        found=total,
    )
    np.testing.assert_array_equal(samples(path), written)


# Sections count from 1, x first, both ends included (common practice of the geometry keywords).
@pytest.mark.parametrize(
    ("text", "rows", "columns"),
    [
        ("[51:2098,1:2048]", (0, 2048), (50, 2098)),
        ("[1:50,1:2048]", (0, 2048), (0, 50)),
        ("[1:1,1:1]", (0, 1), (0, 1)),
    ],
)
def test_sections_are_read_as_the_geometry_keywords_mean_them(text, rows, columns):
    section = parsed(text)
    assert (section.row_start, section.row_stop) == rows
    assert (section.column_start, section.column_stop) == columns
    assert fits_section(section) == text


def test_a_section_takes_the_pixels_that_the_second_library_takes(tmp_path, outside):
    path = tmp_path / "a.fits"
    written = image("u2")
    fitsio.write(str(path), written)
    section = Section(row_start=4, row_stop=30, column_start=7, column_stop=50)
    with fitsio.FITS(str(path)) as file:  # its slices, too, count from 0 and leave the end out
        expected = file[0][4:30, 7:50]
    plane = read_fits(path, Layout()).planes[""]
    layout = geometry(
        Sensor(technology="ccd", pixel_pitch=15.0, outputs={"a": OutputOptions(image=section)}),
        {"": plane.shape},
    )
    found = read_plane(plane, *layout.outputs[0].image.slices[0].indices(37)[:2])
    outside(
        "pixels of section [8:50,5:30]",
        source=FITSIO,
        standing="library",
        expected=expected.astype(float),
        found=found[:, layout.outputs[0].image.slices[1]].astype(float),
    )


REAL = os.environ.get("SENSORGRADE_REAL_FRAMES")


@pytest.mark.skipif(REAL is None, reason="SENSORGRADE_REAL_FRAMES names no folder")
def test_real_frames_are_read_as_the_second_library_reads_them(outside):
    devices = find_devices([Path(str(REAL))], recipe_with(temperature="CCD-TEMP"))
    frames = [frame for device in devices for frame in device.frames]
    assert frames
    for frame in frames:
        (plane,) = frame.planes.values()
        assert isinstance(plane, Plane)
        assert plane.coding is None
        header = fitsio.read_header(str(frame.path))
        outside(
            f"samples of {frame.path.name}",
            source=FITSIO,
            standing="library",
            expected=fitsio.read(str(frame.path)).astype(float),
            found=read_plane(plane, 0, plane.shape[0]).astype(float),
        )
        outside(
            f"exposure and temperature of {frame.path.name}",
            source=FITSIO,
            standing="library",
            expected=[header["EXPTIME"], header["CCD-TEMP"]],
            found=[frame.exposure, frame.temperature],
        )
