"""A simulated device on disk: its frames as a bench would save them, and the truth beside them."""

import io
import json
from dataclasses import asdict
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import numpy as np
from astropy.io import fits

from sensorgrade.frames.frame import DeviceFrames, Frame
from sensorgrade.recipe.model import Section
from sensorgrade.simulate.device import SimulatedDevice
from sensorgrade.simulate.truth import Truth


def write_device(simulated: SimulatedDevice, folder: Path) -> None:
    """Write every frame as FITS, then ``truth.json``, into ``folder``, which is made if needed.

    Samples are 16-bit, unsigned through BZERO (FITS 4.0, 4.4.2.5). Headers say what a bench's
    would: IMAGETYP, EXPTIME [s], CCD-TEMP [degC], DATE-OBS (UTC), SERIAL, and where they are known
    LEVEL (light), FILTER, NPUMP and TPHASE [us] of pumping, LOT, WAFER, DIEROW and DIECOL.
    ``truth.json`` comes last, so a folder that has it is complete.

    Raises
    ------
    OSError
        The folder or a file cannot be written.
    """
    folder.mkdir(parents=True, exist_ok=True)
    for frame in simulated.frames.frames:
        (folder / frame.label).write_bytes(_fits(frame, simulated.frames))
    text = json.dumps(truth_record(simulated.truth), indent=1)
    (folder / "truth.json").write_text(text + "\n", encoding="utf-8")


def truth_record(truth: Truth) -> dict[str, Any]:
    """The truth in plain values: regions by scope, transfer losses, defects and traps placed.

    A defect's ``section`` is written the FITS way, in the assembled image; a trap's ``row`` and
    ``column`` count from 0.
    """
    return {
        "temperature": truth.temperature,
        "cti_parallel": truth.cti_parallel,
        "cti_serial": truth.cti_serial,
        "regions": {scope: asdict(region) for scope, region in truth.regions.items()},
        "defects": [
            {
                "name": defect.name,
                "output": defect.output,
                "section": _fits_section(defect.section),
                "value": defect.value,
                "unit": defect.unit,
            }
            for defect in truth.defects
        ],
        "traps": [asdict(trap) for trap in truth.traps],
    }


def _fits(frame: Frame, device: DeviceFrames) -> bytes:
    """One frame as a FITS file."""
    header = fits.Header()
    header["IMAGETYP"] = (frame.kind.upper(), "kind of frame")
    if frame.exposure is not None:
        header["EXPTIME"] = (frame.exposure, "[s] exposure time")
    if frame.temperature is not None:
        header["CCD-TEMP"] = (frame.temperature, "[deg C] sensor temperature")
    if frame.level is not None:
        header["LEVEL"] = (frame.level, "light in any unit in proportion to it")
    if frame.wavelength is not None:
        header["FILTER"] = (frame.wavelength, "[nm] wavelength, or filter")
    if frame.cycles is not None:
        header["NPUMP"] = (frame.cycles, "cycles of pumping")
    if frame.phase_time is not None:
        header["TPHASE"] = (frame.phase_time, "[us] dwell in one phase")
    if frame.time is not None:
        moment = datetime.fromtimestamp(frame.time, UTC)
        header["DATE-OBS"] = (
            moment.replace(tzinfo=None).isoformat(timespec="milliseconds"),
            "start of the exposure, UTC",
        )
    header["SERIAL"] = (device.serial, "serial number of the device")
    for keyword, value, comment in (
        ("LOT", device.lot, "lot"),
        ("WAFER", device.wafer, "wafer"),
        ("DIEROW", device.die_row, "row of the die on the wafer"),
        ("DIECOL", device.die_column, "column of the die on the wafer"),
    ):
        if value is not None:
            header[keyword] = (value, comment)
    data = np.asarray(frame.planes[""].data)
    buffer = io.BytesIO()
    fits.PrimaryHDU(data, header).writeto(buffer)
    return buffer.getvalue()


def _fits_section(section: Section) -> str:
    columns = f"{section.column_start + 1}:{section.column_stop}"
    return f"[{columns},{section.row_start + 1}:{section.row_stop}]"
