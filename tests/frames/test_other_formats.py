import pickle

import numpy as np
import pytest
import tifffile
from numpy.testing import assert_array_equal

from frames.written import samples
from sensorgrade.errors import FrameError
from sensorgrade.frames.contents import Layout
from sensorgrade.frames.readers import reader_of
from sensorgrade.recipe.model import RawBinary

IMAGE = np.arange(12, dtype=np.uint16).reshape(3, 4) * 5000


def contents(path, layout=None):
    return reader_of(path.name)(path, layout or Layout())


@pytest.mark.parametrize("order", ["<", ">"])
@pytest.mark.parametrize("dtype", ["uint16", "float32"])
def test_tiff_of_native_types_is_read_in_place(tmp_path, order, dtype):
    path = tmp_path / "a.tif"
    tifffile.imwrite(path, IMAGE.astype(dtype), byteorder=order)
    assert contents(path).planes[""].coding is None
    assert_array_equal(samples(path), IMAGE)


@pytest.mark.parametrize("dtype", ["uint8", "int16", "uint32", "int32"])
def test_tiff_of_other_types_is_decoded(tmp_path, dtype):
    path = tmp_path / "a.tiff"
    image = (IMAGE // 500).astype(dtype)
    tifffile.imwrite(path, image)
    assert_array_equal(samples(path), image)


@pytest.mark.parametrize("how", [{"compression": "zlib"}, {"tile": (16, 16)}, {"rowsperstrip": 1}])
def test_tiff_in_parts_is_decoded(tmp_path, how):
    image = np.random.default_rng(4).integers(0, 65536, (40, 50)).astype(np.uint16)
    path = tmp_path / "a.tif"
    tifffile.imwrite(path, image, **how)
    assert_array_equal(samples(path), image)


def test_tiff_description_and_tags_give_values(tmp_path):
    path = tmp_path / "a.tif"
    text = "IMAGETYP = 'dark'\nEXPTIME = 20 s"
    tifffile.imwrite(path, IMAGE, description=text, datetime="2024:01:02 03:04:05", metadata=None)
    values = contents(path).values
    assert values["IMAGETYP"] == "dark"
    assert values["EXPTIME"] == "20 s"
    assert values["DATETIME"] == "2024:01:02 03:04:05"


def test_tiff_with_colours_or_pages_is_refused(tmp_path):
    colours, pages = tmp_path / "a.tif", tmp_path / "b.tif"
    tifffile.imwrite(colours, np.zeros((8, 8, 3), np.uint8), photometric="rgb")
    tifffile.imwrite(pages, np.zeros((3, 8, 8), np.uint8), photometric="minisblack")
    with pytest.raises(FrameError, match="has 3 samples of type uint8 for each pixel"):
        contents(colours)
    with pytest.raises(FrameError, match="holds several images"):
        contents(pages)


def test_truncated_tiff_is_refused(tmp_path):
    path = tmp_path / "a.tif"
    tifffile.imwrite(path, IMAGE, metadata=None)
    path.write_bytes(path.read_bytes()[:-2])
    with pytest.raises(FrameError, match="truncated"):
        contents(path)
    path.write_bytes(b"II*\0")
    with pytest.raises(FrameError, match="is not a TIFF file that can be read"):
        contents(path)


@pytest.mark.parametrize("dtype", ["<u2", ">u2", "<f4", ">f4", "u1", "<i2", ">i4", "<f8"])
@pytest.mark.parametrize("order", ["C", "F"])
def test_npy_of_any_number_is_read(tmp_path, dtype, order):
    path = tmp_path / "a.npy"
    image = np.asarray(IMAGE // 300, dtype=dtype, order=order)
    np.save(path, image)
    assert (contents(path).planes[""].coding is None) == (
        order == "C" and dtype[1:] in ("u2", "f4")
    )
    assert_array_equal(samples(path), image)


class Bait:
    def __reduce__(self):
        return print, ("a pickle was run",)


def test_npy_never_runs_a_pickle(tmp_path, capsys):
    path = tmp_path / "a.npy"
    np.save(path, np.array([[Bait()]], object), allow_pickle=True)
    with pytest.raises(FrameError, match="a frame has plain numbers"):
        contents(path)
    path.write_bytes(pickle.dumps(Bait()))
    with pytest.raises(FrameError, match="is not a NumPy array file"):
        contents(path)
    assert capsys.readouterr().out == ""


@pytest.mark.parametrize("shape", [(4,), (2, 2, 2), (0, 4)])
def test_npy_of_other_shapes_is_refused(tmp_path, shape):
    path = tmp_path / "a.npy"
    np.save(path, np.zeros(shape, np.uint16))
    with pytest.raises(FrameError, match=r"rows and columns|a frame has pixels"):
        contents(path)


def test_truncated_npy_is_refused(tmp_path):
    path = tmp_path / "a.npy"
    np.save(path, IMAGE)
    path.write_bytes(path.read_bytes()[:-1])
    with pytest.raises(FrameError, match="truncated"):
        contents(path)


@pytest.mark.parametrize("order", ["little", "big"])
@pytest.mark.parametrize("dtype", ["uint8", "uint16", "int16", "uint32", "int32", "float32"])
def test_raw_files_follow_the_layout(tmp_path, dtype, order):
    path = tmp_path / "a.raw"
    stored = np.dtype(dtype).newbyteorder("<" if order == "little" else ">")
    image = (IMAGE // 500).astype(stored)
    path.write_bytes(b"skipped" + image.tobytes())
    raw = RawBinary(dtype=dtype, rows=3, columns=4, byte_order=order, skip=7)
    assert_array_equal(samples(path, Layout(raw=raw)), image)


def test_raw_files_of_another_size_or_without_layout_are_refused(tmp_path):
    path = tmp_path / "a.bin"
    path.write_bytes(b"\0" * 25)
    raw = RawBinary(dtype="uint16", rows=3, columns=4)
    with pytest.raises(FrameError, match=r"has 25 bytes, frames.raw describes 24"):
        contents(path, Layout(raw=raw))
    with pytest.raises(FrameError, match=r"add frames.raw"):
        contents(path)


@pytest.mark.parametrize(
    ("name", "known"),
    [("A.FITS", True), ("a.b.fit.gz", True), ("x.fits.fz", True), ("a.gz", False), ("fits", False)],
)
def test_the_reader_is_chosen_by_the_end_of_the_name(name, known):
    assert (reader_of(name) is not None) == known
