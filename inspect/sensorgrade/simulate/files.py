"""A simulated device on disk: its frames as a bench would save them, and the truth beside them."""

import io
import json
from collections.abc import Mapping
from dataclasses import asdict
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import numpy as np
from astropy.io import fits

from sensorgrade.frames.frame import DeviceFrames, Frame
from sensorgrade.recipe.model import FrameRules, Section
from sensorgrade.simulate.device import SimulatedDevice
from sensorgrade.simulate.truth import Truth

# What each card holds, and its keyword where the rules name none.
CARDS = {
    "kind": ("IMAGETYP", "kind of frame"),
    "exposure": ("EXPTIME", "[s] exposure time"),
    "temperature": ("CCD-TEMP", "[deg C] sensor temperature"),
    "level": ("LEVEL", "light in any unit in proportion to it"),
    "wavelength": ("FILTER", "[nm] wavelength, or filter"),
    "cycles": ("NPUMP", "cycles of pumping"),
    "phase_time": ("TPHASE", "[us] dwell in one phase"),
    "time": ("DATE-OBS", "start of the exposure, UTC"),
    "serial": ("SERIAL", "serial number of the device"),
    "lot": ("LOT", "lot"),
    "wafer": ("WAFER", "wafer"),
    "die_row": ("DIEROW", "row of the die on the wafer"),
    "die_column": ("DIECOL", "column of the die on the wafer"),
}
USUAL = FrameRules()


def write_device(
    simulated: SimulatedDevice, folder: Path, *, rules: FrameRules = USUAL
) -> list[dict[str, Any]]:
    """Write every frame as FITS, then ``truth.json``, into ``folder``, which is made if needed.

    Samples are 16-bit, unsigned through BZERO (FITS 4.0, 4.4.2.5). Headers say what a bench's
    would, under the keywords of ``rules`` or the usual ones (`CARDS`). Where names tell frames
    apart, they are of the form ``dark_100ms_0012.fits``. ``truth.json`` comes last, so a folder
    that has it is complete.

    Returns
    -------
    list of dict
        What the cards of each frame say, and its ``file``, as a manifest would.

    Raises
    ------
    OSError
        The folder or a file cannot be written.
    """
    folder.mkdir(parents=True, exist_ok=True)
    told = []
    for number, frame in enumerate(simulated.frames.frames):
        name = frame.label
        if rules.sorted_by == "name":
            name = f"{frame.kind}_{1000 * (frame.exposure or 0):g}ms_{number:04d}.fits"
        known = _known(frame, simulated.frames)
        (folder / name).write_bytes(_fits(frame, known, rules))
        told.append({"file": name, **known})
    text = json.dumps(truth_record(simulated.truth), indent=1)
    (folder / "truth.json").write_text(text + "\n", encoding="utf-8")
    return told


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


def _known(frame: Frame, device: DeviceFrames) -> dict[str, Any]:
    """What is known of a frame, by the names of `CARDS`."""
    time = None
    if frame.time is not None:
        moment = datetime.fromtimestamp(frame.time, UTC).replace(tzinfo=None)
        time = moment.isoformat(timespec="milliseconds")
    known = {
        "kind": frame.kind.upper(),
        "exposure": frame.exposure,
        "temperature": frame.temperature,
        "level": frame.level,
        "wavelength": frame.wavelength,
        "cycles": frame.cycles,
        "phase_time": frame.phase_time,
        "time": time,
        "serial": device.serial,
        "lot": device.lot,
        "wafer": device.wafer,
        "die_row": device.die_row,
        "die_column": device.die_column,
    }
    return {name: value for name, value in known.items() if value is not None}


def _fits(frame: Frame, known: Mapping[str, Any], rules: FrameRules) -> bytes:
    """One frame as a FITS file."""
    header = fits.Header()
    for name, value in known.items():
        usual, comment = CARDS[name]
        keyword = getattr(rules, name) if rules.sorted_by == "header" else None
        header[keyword or usual] = (value, comment)
    data = np.asarray(frame.planes[""].data)
    buffer = io.BytesIO()
    fits.PrimaryHDU(data, header).writeto(buffer)
    return buffer.getvalue()


def _fits_section(section: Section) -> str:
    columns = f"{section.column_start + 1}:{section.column_stop}"
    return f"[{columns},{section.row_start + 1}:{section.row_stop}]"
