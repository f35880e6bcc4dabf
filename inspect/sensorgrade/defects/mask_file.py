"""The mask and the table of defects as files that reduction software reads."""

import io
from pathlib import Path

import numpy as np
from astropy.io import fits
from astropy.table import Table
from numpy.typing import NDArray

from sensorgrade.atomic import write_whole
from sensorgrade.defects.bits import BITS
from sensorgrade.defects.defect import DEFECT, Defects
from sensorgrade.errors import RequestError

LONGEST = 44  # characters of a card's comment beside the name of a bit
MEANINGS = {
    "kind": "what it is",
    "row": "row of its strongest pixel, from 0",
    "column": "column of its strongest pixel, from 0",
    "row_start": "first row",
    "row_stop": "row after its last",
    "column_start": "first column",
    "column_stop": "column after its last",
    "pixels": "pixels it has",
    "value": "departure, or response, in unit",
    "uncertainty": "standard uncertainty of value",
    "unit": "unit of value",
    "significance": "departure over its uncertainty",
    "probability": "chance that it is truly past the threshold",
    "output": "output that reads it",
    "zone": "zone of the recipe that holds it",
}


def write_mask(path: Path, defects: Defects, *, serial: str) -> None:
    """Write the bit mask (uint16, 0 = good) with the table of defects behind it.

    The header says what each bit means; x and y in the table are FITS positions (from 1).
    CHECKSUM and DATASUM are set; nothing depends on when it is written.

    Raises
    ------
    OSError
        The file cannot be written; nothing is left behind.
    """
    image = mask_unit(defects.mask, serial=serial)
    columns = [
        fits.Column(name=name, format=_format(name), array=defects.table[name])
        for name in DEFECT.names or ()
    ]
    columns += [
        fits.Column(name="x", format="J", array=defects.table["column"] + 1),
        fits.Column(name="y", format="J", array=defects.table["row"] + 1),
    ]
    table = fits.BinTableHDU.from_columns(columns, name="DEFECTS")
    hdus = fits.HDUList([image, table])
    for hdu in hdus:
        hdu.add_checksum(when="when written")
    buffer = io.BytesIO()
    hdus.writeto(buffer)
    write_whole(path, buffer.getvalue())


def mask_unit(mask: NDArray[np.uint16], *, serial: str) -> fits.PrimaryHDU:
    """The bits (M, N) as an image whose header says what each of them means."""
    image = fits.PrimaryHDU(mask)
    image.header["SERIAL"] = ("".join(c if 32 <= ord(c) < 127 else "?" for c in serial)[:60], "")
    image.header["MASKZERO"] = ("good", "what 0 says; bits say what is wrong")
    for bit in BITS:
        place = bit.value.bit_length() - 1
        image.header[f"BIT{place:02d}"] = (bit.name, f"{bit.value}: {bit.meaning}"[:LONGEST])
    return image


def _format(name: str) -> str:
    """TFORM of a column of the defect table."""
    kind = DEFECT[name]
    return {"i": "J", "f": "D"}.get(kind.kind) or f"{kind.itemsize // 4}A"


def read_mask(path: Path) -> tuple[NDArray[np.bool_], NDArray[np.uint16]]:
    """A mask file as (True where bad, bits), both (M, N).

    Raises
    ------
    RequestError
        The file is no mask.
    """
    try:
        with fits.open(path) as hdus:
            bits = np.asarray(hdus[0].data)
    except OSError as error:
        raise RequestError(f"{path}: cannot be read as a mask; give a mask.fits") from error
    if bits.ndim != 2 or bits.dtype.kind not in "iu":
        raise RequestError(f"{path}: holds no image of whole numbers; give a mask.fits")
    mask = bits.astype(np.uint16)
    return mask > 0, mask


def mask_serial(path: Path) -> str:
    """The serial number in a mask file's header, or an empty text."""
    return str(fits.getheader(path).get("SERIAL", ""))


def write_defect_table(path: Path, defects: Defects) -> None:
    """Write the defects as ECSV, with a sentence for each column."""
    table = Table(defects.table)
    for name, meaning in MEANINGS.items():
        table[name].description = meaning
    text = io.StringIO()
    table.write(text, format="ascii.ecsv")
    write_whole(path, text.getvalue())
