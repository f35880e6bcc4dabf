"""A mask in other forms: FITS of bits or of 0 and 1, boolean NumPy, list of pixels, picture."""

import io
from pathlib import Path

import numpy as np
from astropy.io import fits
from numpy.typing import NDArray

from sensorgrade.atomic import write_whole
from sensorgrade.defects.bits import names_of
from sensorgrade.defects.mask_file import mask_unit
from sensorgrade.errors import RequestError
from sensorgrade.png import png

SUFFIXES = (".fits", ".npy", ".csv", ".png")


def export_mask(
    path: Path, mask: NDArray[np.uint16], *, serial: str, zero_one: bool = False
) -> None:
    """Write a mask (M, N) in the form that the file's name ends with.

    ``.fits`` holds the bits, as `read_mask` takes them, or with ``zero_one`` 0 and 1 (bad) in
    uint8; ``.npy`` a boolean array, True where bad; ``.csv`` one line for each bad pixel: row and
    column from 0, FITS x and y from 1, its bits as a number and by name; ``.png`` white where
    bad, row 0 on top.

    Raises
    ------
    RequestError
        The name ends otherwise.
    OSError
        The file cannot be written; nothing is left behind.
    """
    if path.suffix == ".fits":
        write_whole(path, _fits(mask, serial, zero_one=zero_one))
    elif path.suffix == ".npy":
        buffer = io.BytesIO()
        np.save(buffer, mask > 0)
        write_whole(path, buffer.getvalue())
    elif path.suffix == ".csv":
        write_whole(path, pixel_list(mask))
    elif path.suffix == ".png":
        write_whole(path, png((mask > 0).astype(np.uint8) * np.uint8(255)))
    else:
        raise RequestError(
            f"{path}: masks are written as {', '.join(SUFFIXES)}; give a name that ends so"
        )


def pixel_list(mask: NDArray[np.uint16]) -> str:
    """The bad pixels of a mask (M, N) as CSV, row by row."""
    lines = ["row,column,x,y,bits,names"]
    for row, column in np.argwhere(mask):
        bits = int(mask[row, column])
        lines.append(f"{row},{column},{column + 1},{row + 1},{bits},{' + '.join(names_of(bits))}")
    return "\n".join(lines) + "\n"


def _fits(mask: NDArray[np.uint16], serial: str, *, zero_one: bool) -> bytes:
    if zero_one:
        unit = fits.PrimaryHDU((mask > 0).astype(np.uint8))
        unit.header["MASKZERO"] = ("good", "what 0 says; 1 is bad")
    else:
        unit = mask_unit(mask, serial=serial)
    unit.add_checksum(when="when written")
    buffer = io.BytesIO()
    unit.writeto(buffer)
    return buffer.getvalue()
