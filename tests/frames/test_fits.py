import gzip
import sys

import numpy as np
import pytest
from astropy.io import fits
from numpy.testing import assert_array_equal

from frames.written import fits_bytes, samples, write_fits
from sensorgrade.errors import FrameError
from sensorgrade.frames.contents import Layout
from sensorgrade.frames.decode import read_plane
from sensorgrade.frames.fits import read_fits

IMAGE = np.array([[0, 1, 2], [32767, 32768, 65535]], np.uint16)


def plane_of(path, *extensions):
    return read_fits(path, Layout(extensions)).planes


def test_unsigned_16_is_read_in_place(tmp_path):
    path = write_fits(tmp_path / "a.fits", IMAGE, EXPTIME=2.5, IMAGETYP="Flat Field")
    contents = read_fits(path, Layout())
    plane = contents.planes[""]
    assert (plane.coding, plane.flip, plane.dtype) == (None, True, "uint16")
    assert plane.swap == (sys.byteorder == "little")
    assert plane.offset % 2880 == 0
    assert contents.values["EXPTIME"] == 2.5
    assert contents.values["IMAGETYP"] == "Flat Field"
    assert_array_equal(samples(path), IMAGE)


def test_float_32_is_read_in_place(tmp_path):
    image = np.array([[1.5, -2.5]], np.float32)
    path = write_fits(tmp_path / "a.fits", image)
    assert plane_of(path)[""].coding is None
    assert_array_equal(samples(path), image)


@pytest.mark.parametrize("dtype", ["u1", "i2", "i4", "u4", "i8", "f8"])
def test_other_types_are_decoded(tmp_path, dtype):
    image = np.arange(12, dtype=dtype).reshape(3, 4)
    path = write_fits(tmp_path / "a.fits", image)
    assert plane_of(path)[""].coding is not None
    assert_array_equal(samples(path), image)
    assert samples(path).dtype == ("uint16" if dtype == "u1" else "float32")


def test_negative_samples_survive(tmp_path):
    image = np.array([[-3, 4]], np.int16)
    assert_array_equal(samples(write_fits(tmp_path / "a.fits", image)), [[-3.0, 4.0]])


def test_rows_are_read_band_by_band(tmp_path):
    image = np.arange(35, dtype=np.uint16).reshape(7, 5)
    for name, kind in (("a.fits", np.uint16), ("b.fits", np.float64)):
        plane = plane_of(write_fits(tmp_path / name, image.astype(kind)))[""]
        assert_array_equal(read_plane(plane, 2, 5), image[2:5])


def test_bands_of_large_coded_images_join(tmp_path):
    image = np.random.default_rng(1).integers(0, 10**6, (1500, 1001)).astype(np.int32)
    assert_array_equal(samples(write_fits(tmp_path / "a.fits", image)), image)


@pytest.mark.parametrize("suffix", [".fits.gz", ".fit.gz", ".fits"])
def test_gzip_is_told_by_its_content(tmp_path, suffix):
    plain = write_fits(tmp_path / "a.fits", IMAGE)
    path = tmp_path / f"b{suffix}"
    path.write_bytes(gzip.compress(plain.read_bytes()))
    assert_array_equal(samples(path), IMAGE)


@pytest.mark.parametrize("form", ["RICE_1", "GZIP_1", "GZIP_2", "HCOMPRESS_1"])
def test_tile_compressed_images_are_decoded(tmp_path, form):
    image = np.random.default_rng(2).integers(0, 30000, (64, 48)).astype(np.uint16)
    path = tmp_path / "a.fits.fz"
    unit = fits.CompImageHDU(image, compression_type=form)
    unit.header["EXPTIME"] = 3.0
    fits.HDUList([fits.PrimaryHDU(), unit]).writeto(path)
    assert read_fits(path, Layout()).values["EXPTIME"] == 3.0
    found = samples(path)
    assert found.dtype == np.uint16
    assert_array_equal(found, image)


def test_scaled_samples_get_their_physical_value(tmp_path):
    path = tmp_path / "a.fits"
    cards = ["SIMPLE  = T", "BITPIX  = 16", "NAXIS   = 2", "NAXIS1  = 2", "NAXIS2  = 1"]
    data = np.array([[10, -4]], ">i2").tobytes()
    path.write_bytes(fits_bytes([*cards, "BSCALE  = 0.5", "BZERO   = 100"], data))
    assert_array_equal(samples(path), [[105.0, 98.0]])


def test_an_image_may_stand_in_any_extension(tmp_path):
    path = tmp_path / "a.fits"
    table = fits.BinTableHDU.from_columns([fits.Column("x", "J", array=[1, 2, 3])])
    primary = fits.PrimaryHDU()
    primary.header["EXPTIME"] = 7.0
    fits.HDUList([primary, table, fits.ImageHDU(IMAGE, name="CHIP")]).writeto(path)
    contents = read_fits(path, Layout())
    assert contents.values["EXPTIME"] == 7.0
    assert contents.values["EXTNAME"] == "CHIP"
    assert_array_equal(samples(path), IMAGE)


def test_outputs_are_found_by_extension_name_or_number(tmp_path):
    path = tmp_path / "a.fits"
    units = [fits.PrimaryHDU()]
    units += [fits.ImageHDU(IMAGE + k, name=name) for k, name in enumerate(("AMP1", "AMP2"))]
    fits.HDUList(units).writeto(path)
    planes = plane_of(path, "2", "amp1")
    assert list(planes) == ["2", "amp1"]
    assert_array_equal(read_plane(planes["2"], 0, 2), IMAGE + 1)
    assert_array_equal(read_plane(planes["amp1"], 0, 2), IMAGE)
    with pytest.raises(FrameError, match="has no image extension 'AMP3'; it has AMP1, AMP2"):
        plane_of(path, "AMP3")
    with pytest.raises(FrameError, match="holds 2 images"):
        plane_of(path)


def test_a_third_axis_of_one_does_no_harm(tmp_path):
    assert_array_equal(samples(write_fits(tmp_path / "a.fits", IMAGE[np.newaxis])), IMAGE)


def test_a_cube_is_refused(tmp_path):
    path = write_fits(tmp_path / "a.fits", np.zeros((2, 3, 4), np.uint16))
    with pytest.raises(FrameError, match=r"has 3 axes \(4 x 3 x 2\); a frame has two"):
        read_fits(path, Layout())


def test_undefined_samples_are_refused_but_the_card_alone_is_not(tmp_path):
    # FITS 4.0, 4.4.2.5: BLANK is the stored number, before BZERO.
    cards = ["SIMPLE  = T", "BITPIX  = 16", "NAXIS   = 2", "NAXIS1  = 2", "NAXIS2  = 1"]
    cards += ["BZERO   = 32768", "BLANK   = -32768"]
    whole, holed = tmp_path / "whole.fits", tmp_path / "holed.fits"
    whole.write_bytes(fits_bytes(cards, np.array([[-32767, 5]], ">i2").tobytes()))
    holed.write_bytes(fits_bytes(cards, np.array([[-32768, 5]], ">i2").tobytes()))
    assert_array_equal(samples(whole), [[1, 32773]])
    with pytest.raises(FrameError, match=r"1 or more undefined samples \(BLANK = -32768\)"):
        samples(holed)


def test_an_offset_of_the_wrong_sign_is_taken_literally_with_a_remark(tmp_path):
    cards = ["SIMPLE  = T", "BITPIX  = 16", "NAXIS   = 2", "NAXIS1  = 2", "NAXIS2  = 1"]
    path = tmp_path / "a.fits"
    data = np.array([[-32768, 32767]], ">i2").tobytes()
    path.write_bytes(fits_bytes([*cards, "BZERO   = -32768"], data))
    (remark,) = read_fits(path, Layout()).remarks
    assert "opposite of the standard's sign" in remark
    assert_array_equal(samples(path), [[-65536.0, -1.0]])


@pytest.mark.parametrize("cut", [1, 2880, 4000])
def test_a_truncated_file_says_where_it_ends(tmp_path, cut):
    whole = write_fits(tmp_path / "a.fits", np.zeros((40, 72), np.uint16)).read_bytes()
    path = tmp_path / "b.fits"
    path.write_bytes(whole[: -(cut + (-(40 * 72 * 2) % 2880))])
    with pytest.raises(FrameError, match="truncated: the image ends at byte 8640, the file has"):
        read_fits(path, Layout())


def test_missing_padding_at_the_end_does_no_harm(tmp_path):
    whole = write_fits(tmp_path / "a.fits", IMAGE).read_bytes()
    path = tmp_path / "b.fits"
    path.write_bytes(whole[: 2880 + 12])
    assert_array_equal(samples(path), IMAGE)


def test_a_truncated_gzip_is_refused(tmp_path):
    image = np.random.default_rng(3).integers(0, 65536, (64, 64)).astype(np.uint16)
    packed = gzip.compress(write_fits(tmp_path / "a.fits", image).read_bytes())
    path = tmp_path / "b.fits.gz"
    path.write_bytes(packed[: len(packed) // 2])
    with pytest.raises(FrameError, match="gzip stream is damaged"):
        samples(path)
    flipped = bytearray(packed)
    flipped[-6] ^= 1  # in the stream's own checksum
    path.write_bytes(flipped)
    with pytest.raises(FrameError, match="gzip stream is damaged"):
        samples(path)


@pytest.mark.parametrize(
    ("cards", "sentence"),
    [
        (["SIMPLE  = F", "BITPIX  = 16"], "is not FITS"),
        (["SIMPLE  = T", "BITPIX  = 12"], "BITPIX is 12"),
        (["SIMPLE  = T", "BITPIX  = 16", "NAXIS   = T"], "NAXIS is True"),
        (["SIMPLE  = T", "BITPIX  = 16", "NAXIS   = 2", "NAXIS1  = 4"], "NAXIS2 is None"),
        (["SIMPLE  = T", "BITPIX  = 16", "NAXIS   = 0"], "holds no image"),
        (
            ["SIMPLE  = T", "BITPIX  = 16", "NAXIS   = 2", "NAXIS1  = 4", "NAXIS2  = -4"],
            "NAXIS2 is -4",
        ),
        (
            ["SIMPLE  = T", "BITPIX  = 16", "NAXIS   = 2", "NAXIS1  = 99999", "NAXIS2  = 99999"],
            "more than the 1073741824 that a frame may have",
        ),
        (
            [
                *("SIMPLE  = T", "BITPIX  = 16", "NAXIS   = 2", "NAXIS1  = 1", "NAXIS2  = 1"),
                "BSCALE  = 'one'",
            ],
            "BSCALE is 'one'",
        ),
    ],
)
def test_a_header_that_breaks_the_standard_gets_one_sentence(tmp_path, cards, sentence):
    path = tmp_path / "a.fits"
    path.write_bytes(fits_bytes(cards))
    with pytest.raises(FrameError, match=sentence):
        read_fits(path, Layout())


def test_a_bomb_is_refused_before_it_is_unpacked(tmp_path):
    cards = ["SIMPLE  = T", "BITPIX  = 16", "NAXIS   = 2", "NAXIS1  = 30000", "NAXIS2  = 30000"]
    path = tmp_path / "a.fits.gz"
    path.write_bytes(gzip.compress(fits_bytes(cards, b"\0" * 10**6)))
    with pytest.raises(FrameError, match="claims to expand from"):
        read_fits(path, Layout())
