"""Master frames as FITS that general reduction software opens with no arguments."""

import io
from pathlib import Path

import numpy as np
from astropy.io import fits

from sensorgrade.atomic import write_whole
from sensorgrade.masters.master import Master


def write_master(path: Path, master: Master, *, serial: str) -> None:
    """Write values with MASK and UNCERT extensions, in the order of astropy's CCDData.

    The primary image holds the values (float32); MASK (uint8) is 1 where no sample was valid;
    UNCERT the standard uncertainty; COUNT the samples used. BUNIT is ``adu`` for DN, the word of
    the FITS standard. CHECKSUM and DATASUM are set (FITS 4.0, appendix J). Nothing in the file
    depends on when it was written.

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
    uncertainty = fits.ImageHDU(master.uncertainty, name="UNCERT")
    uncertainty.header["UTYPE"] = "StdDevUncertainty"
    uncertainty.header["BUNIT"] = header["BUNIT"]
    hdus = fits.HDUList(
        [
            fits.PrimaryHDU(master.values, header),
            fits.ImageHDU((master.count == 0).astype(np.uint8), name="MASK"),
            uncertainty,
            fits.ImageHDU(master.count, name="COUNT"),
        ]
    )
    for hdu in hdus:
        hdu.add_checksum(when="", override_datasum=True)
    buffer = io.BytesIO()
    hdus.writeto(buffer)
    write_whole(path, buffer.getvalue())


def _ascii(text: str) -> str:
    """Text as a FITS header can hold it: printable ASCII, short enough for one card."""
    return "".join(c if 32 <= ord(c) < 127 else "?" for c in text)[:60]
