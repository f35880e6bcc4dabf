"""Master frames as FITS that general reduction software opens with no arguments."""

from collections.abc import Iterator
from itertools import chain
from pathlib import Path
from typing import Any

import numpy as np
from astropy.io import fits
from numpy.typing import NDArray

from sensorgrade.atomic import write_whole
from sensorgrade.masters.master import Master

BLOCK = 2880  # bytes; everything in a FITS file is padded to a multiple
PIECE = 1 << 20  # bytes
OFFSET = 0x30  # ASCII "0", from which the characters of a checksum are counted
PUNCTUATION = (*range(0x3A, 0x41), *range(0x5B, 0x61))  # not allowed in a checksum


def write_master(path: Path, master: Master, *, serial: str) -> None:
    """Write values with MASK and UNCERT extensions, in the order of astropy's CCDData.

    The primary image holds the values (float32); MASK (uint8) is 1 where no sample was valid;
    UNCERT the standard uncertainty. BUNIT is ``adu`` for DN, the word of the FITS standard.
    CHECKSUM and DATASUM are set (FITS 4.0, appendix J). Nothing in the file depends on when it
    was written.

    Raises
    ------
    OSError
        The file cannot be written; nothing is left behind.
    """
    header = fits.Header()
    header["BUNIT"] = ("adu" if master.unit == "DN" else "", "unit of the values")
    header["IMAGETYP"] = (f"master {master.kind}", "what the frame is")
    header["NCOMBINE"] = (len(master.stack.frames), "frames joined")
    if master.stack.exposure is not None:
        header["EXPTIME"] = (master.stack.exposure, "[s] exposure of the frames joined")
    if master.stack.temperature is not None:
        header["CCD-TEMP"] = (round(master.stack.temperature, 3), "[deg C] mean sensor temperature")
    header["SERIAL"] = (_ascii(serial), "serial number of the device")
    empty = (master.count == 0).astype(np.uint8)
    doubt = fits.Header({"UTYPE": "StdDevUncertainty", "BUNIT": header["BUNIT"]})
    write_whole(
        path,
        chain(
            _unit(master.values, header, name=None),
            _unit(empty, fits.Header(), name="MASK"),
            _unit(master.uncertainty, doubt, name="UNCERT"),
        ),
    )


def _unit(
    image: NDArray[np.float32] | NDArray[np.uint8], header: fits.Header, *, name: str | None
) -> Iterator[bytes | memoryview]:
    """One header-data unit in parts: header, rows of data, padding.

    The sums are taken of the samples as they lie in memory, in a fraction of the time that a
    general FITS library needs for them; a test has two such libraries verify the result.
    """
    kind: Any = fits.PrimaryHDU if name is None else fits.ImageHDU
    shaped = kind(np.broadcast_to(image.dtype.type(0), image.shape), header)
    if name is not None:
        shaped.name = name
    cards = shaped.header
    if image.dtype == np.float32:
        total = _folded(int(image.view(np.uint32).sum(dtype=np.uint64)))
    else:
        padded = np.zeros(-(-image.size // 4) * 4, np.uint8)
        padded[: image.size] = image.ravel()
        total = _folded(int(padded.view(">u4").sum(dtype=np.uint64)))
    cards["CHECKSUM"] = ("0" * 16, "sum of this unit, FITS 4.0 appendix J")
    cards["DATASUM"] = (str(total), "sum of its data")
    text = cards.tostring().encode("ascii")
    whole = _folded(int(np.frombuffer(text, ">u4").sum(dtype=np.uint64)) + total)
    cards["CHECKSUM"] = checksum_text(~whole & 0xFFFFFFFF)
    yield cards.tostring().encode("ascii")
    # Turned to the file's byte order in pieces that stay in the cache.
    for piece in np.array_split(image, -(-image.nbytes // PIECE)):
        yield piece.astype(image.dtype.newbyteorder(">"), order="C").data.cast("B")
    yield bytes(-image.nbytes % BLOCK)


def _folded(total: int) -> int:
    """A sum of 32-bit words with its carries added back in (ones' complement)."""
    while total >> 32:
        total = (total & 0xFFFFFFFF) + (total >> 32)
    return total


def checksum_text(value: int) -> str:
    """A 32-bit sum as 16 characters that add up to it (FITS 4.0, appendix J.2).

    Each byte is shared among four characters, made unequal in pairs until none is punctuation;
    the text is turned by one so that it falls on word boundaries in its card.
    """
    characters = [0] * 16
    for place in range(4):
        byte = value >> (24 - 8 * place) & 0xFF
        quarter, rest = divmod(byte, 4)
        four = [quarter + OFFSET + (rest if i == 0 else 0) for i in range(4)]
        while any(c in PUNCTUATION for c in four):
            for i in (0, 2):
                if four[i] in PUNCTUATION or four[i + 1] in PUNCTUATION:
                    four[i] += 1
                    four[i + 1] -= 1
        for i in range(4):
            characters[4 * i + place] = four[i]
    turned = characters[-1:] + characters[:-1]
    return bytes(turned).decode("ascii")


def _ascii(text: str) -> str:
    """Text as a FITS header can hold it: printable ASCII, short enough for one card."""
    return "".join(c if 32 <= ord(c) < 127 else "?" for c in text)[:60]
