"""Real frames of invented sensors, small enough that a whole inspection takes a moment."""

from pathlib import Path

import numpy as np

from frames.written import write_fits

ROWS, IMAGE, OVERSCAN = 32, 24, 8  # of one output; two lie side by side, then their overscans
SECTIONS = {
    "left": {"image": "[1:24,1:32]", "overscan": "[49:56,1:32]"},
    "right": {"image": "[25:48,1:32]", "overscan": "[57:64,1:32]"},
}
RECIPE = """\
name: small sensors
sensor:
  technology: ccd
  pixel_pitch: 15 um
  outputs:
    left: {image: "[1:24,1:32]", overscan: "[49:56,1:32]"}
    right: {image: "[25:48,1:32]", overscan: "[57:64,1:32]", corner: bottom right}
frames: {kind: IMAGETYP, exposure: EXPTIME, temperature: CCD-TEMP, time: DATE-OBS, serial: SERIAL}
stages:
  bias_level: {}
  photon_transfer: {}
  read_noise: {}
  dark_current: {}
  response_uniformity: {}
  pixels: {}
  lines: {}
  clusters: {}
grades:
  usable: {read_noise: <= 40 electron, hot_pixels: <= 4}
"""
PLAN = [("bias", 0.0, 0.0)] * 4 + [("dark", 20.0, 0.0)] * 4
PLAN += [("flat", 1.0 + level, 9000.0 * (1 + level)) for level in range(5) for _ in "ab"]
PLAN += [("flat", 8.0, 20000.0)] * 3


def write_sensor(
    folder: Path, serial: str, *, seed: int = 0, hot: int = 2, **cards: object
) -> Path:
    """Every frame of one device; ``cards`` go into each header."""
    folder.mkdir(parents=True, exist_ok=True)
    rng = np.random.default_rng(seed)
    response = 1 + 0.01 * rng.standard_normal((ROWS, 2 * IMAGE))
    current = np.full((ROWS, 2 * IMAGE), 0.05)
    current.flat[rng.choice(current.size, hot, replace=False)] = 200.0
    for number, (kind, exposure, light) in enumerate(PLAN):
        charge = rng.poisson(np.maximum(light * response + current * exposure, 0))
        bias = np.repeat([1000.0, 1100.0], IMAGE)
        over = np.repeat([1000.0, 1100.0], OVERSCAN)
        codes = np.hstack([charge / 2 + bias, np.broadcast_to(over, (ROWS, 2 * OVERSCAN))])
        codes += rng.normal(0, 3, codes.shape)
        write_fits(
            folder / f"{kind}_{number:02d}.fits",
            np.rint(codes).clip(0, 65535).astype(np.uint16),
            IMAGETYP=kind,
            EXPTIME=exposure,
            CCD_TEMP=-20.0,
            DATE_OBS=f"2026-03-01T08:{number:02d}:00",
            SERIAL=serial,
            **cards,
        )
    return folder


def write_lot(source: Path, devices: int) -> Path:
    """So many devices, each in a folder named for its serial."""
    for number in range(devices):
        write_sensor(source / f"S{number}", f"S{number}", seed=number, hot=2 + 4 * (number % 2))
    return source


def write_recipe(path: Path) -> Path:
    """The recipe for them."""
    path.write_text(RECIPE)
    return path
