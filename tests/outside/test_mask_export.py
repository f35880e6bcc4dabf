"""Every form a mask is written in, read back by the library that it is meant for."""

import csv

import numpy as np
import pytest
from astropy.io import fits
from click.testing import CliRunner
from fitsio import FITS
from PIL import Image

from sensorgrade.cli.main import command
from sensorgrade.defects.bits import BY_NAME
from sensorgrade.defects.defect import DEFECT, Defects
from sensorgrade.defects.mask_file import read_mask, write_mask

HOT, COLUMN = BY_NAME["hot"].value, BY_NAME["column"].value


def bits():
    mask = np.zeros((6, 8), np.uint16)
    mask[1, 2] = HOT
    mask[4, 6] = HOT | COLUMN
    mask[:, 7] = COLUMN
    return mask


@pytest.fixture
def folder(tmp_path):
    defects = Defects(table=np.empty(0, DEFECT), mask=bits(), counts=(), findings=())
    write_mask(tmp_path / "mask.fits", defects, serial="W3-17")
    return tmp_path


def run(*arguments, status=0):
    done = CliRunner().invoke(command, ["mask", *map(str, arguments)])
    assert done.exit_code == status, done.output
    return done.output


def test_numpy_reads_booleans(folder, outside):
    run(folder / "mask.fits", "--out", folder / "bad.npy")
    found = np.load(folder / "bad.npy")
    assert found.dtype == np.bool_
    outside(
        "mask as .npy",
        source="numpy.load",
        standing="library",
        expected=(bits() > 0).astype(int),
        found=found.astype(int),
    )


def test_a_list_names_every_bad_pixel(folder, outside):
    run(folder / "mask.fits", "--without", "column", "--out", folder / "bad.csv")
    with (folder / "bad.csv").open(newline="") as file:
        rows = list(csv.DictReader(file))
    assert [row["names"] for row in rows] == ["hot", "hot"]
    outside(
        "mask as a list of pixels: x, y from 1",
        source="Python's csv reader",
        standing="library",
        expected=[[3, 2], [7, 5]],
        found=[[int(row["x"]), int(row["y"])] for row in rows],
    )
    assert [(int(row["row"]), int(row["column"])) for row in rows] == [(1, 2), (4, 6)]


def test_fits_of_bits_keeps_serial_and_meanings(folder, outside):
    run(folder / "mask.fits", "--crop", "[3:8,2:5]", "--out", folder / "cut.fits")
    with FITS(str(folder / "cut.fits")) as file:
        file[0].verify_checksum()
        found, header = file[0].read(), file[0].read_header()
    outside(
        "mask cut to x 3 to 8, y 2 to 5, as FITS of bits",
        source="fitsio (CFITSIO)",
        standing="library",
        expected=bits()[1:5, 2:8],
        found=found,
    )
    assert header["SERIAL"].strip() == "W3-17" and header["BIT10"].strip() == "column"
    assert (read_mask(folder / "cut.fits")[1] == found).all()


def test_fits_of_zero_and_one(folder, outside):
    run(folder / "mask.fits", "--zero-one", "--out", folder / "bad.fits")
    with fits.open(folder / "bad.fits", checksum=True) as hdus:
        assert hdus[0].header["BITPIX"] == 8
        outside(
            "mask as FITS of 0 and 1",
            source="astropy.io.fits",
            standing="library",
            expected=(bits() > 0).astype(int),
            found=hdus[0].data.astype(int),
        )


def test_a_picture_is_white_where_bad(folder, outside):
    run(folder / "mask.fits", "--out", folder / "bad.png")
    with Image.open(folder / "bad.png") as picture:
        outside(
            "mask as .png",
            source="Pillow",
            standing="library",
            expected=np.where(bits() > 0, 255, 0),
            found=np.asarray(picture).astype(int),
        )


def test_a_binned_and_turned_mask_is_that_of_the_turned_and_binned_image(folder, outside):
    # An image of 1 where bad, put through the same readout by numpy alone.
    run(folder / "mask.fits", "--flip", "columns", "--bin", "4x3", "--out", folder / "b.npy")
    binned = (bits() > 0)[:, ::-1].reshape(2, 3, 2, 4).sum(axis=(1, 3))
    outside(
        "mask flipped and binned 4 x 3",
        source="sum of bad pixels in each bin, by numpy",
        standing="library",
        expected=(binned > 0).astype(int),
        found=np.load(folder / "b.npy").astype(int),
    )


def test_masks_merge_and_the_status_tells_whether_they_differ(folder):
    other = Defects(table=np.empty(0, DEFECT), mask=bits()[::-1], counts=(), findings=())
    write_mask(folder / "other.fits", other, serial="W3-17")
    run(folder / "mask.fits", folder / "other.fits", "--out", folder / "both.fits", "--quiet")
    assert (read_mask(folder / "both.fits")[1] == bits() | bits()[::-1]).all()
    assert run(folder / "mask.fits", "--compare", folder / "mask.fits", "--quiet") == ""
    text = run(folder / "mask.fits", "--compare", folder / "other.fits", status=1)
    # Both flips of [1, 2] and [4, 6] are bad in one mask only, the column is in both.
    assert text.splitlines()[1].split() == ["any", "6", "2", "2"]
    assert text.splitlines()[3].split() == ["column", "6", "1", "1"]


def test_what_a_mask_holds_is_counted(folder):
    assert run(folder / "mask.fits").splitlines() == [
        "8 x 6 pixels (x by y), 8 bad",
        "hot                 2",
        "column              7",
    ]
    assert run(folder / "mask.fits", "--json") == (
        '{"rows": 6, "columns": 8, "bad": 8, "bits": {"hot": 2, "column": 7}}\n'
    )


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (["--out", "bad.tif"], "masks are written as .fits, .npy, .csv, .png"),
        (["--bits", "hott"], "no bit is called 'hott'"),
        (["--bin", "3x3"], "does not divide the mask of 8 x 6"),
        (["--crop", "[0:3,1:2]"], "pixels count from 1"),
        (["--grow", "hot"], "expected a bit and pixels"),
        (["--compare", "none.fits"], "none.fits: cannot be read as a mask"),
    ],
)
def test_a_wrong_request_is_one_sentence(folder, arguments, words):
    done = CliRunner().invoke(command, ["mask", str(folder / "mask.fits"), *arguments])
    assert done.exit_code != 0
    assert words in f"{done.output}{done.exception}"
