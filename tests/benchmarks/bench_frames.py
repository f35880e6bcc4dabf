"""Raw frames for the benchmarks: quick to make, with noise, response, hot pixels and particles."""

import shutil
from pathlib import Path

import numpy as np
from astropy.io import fits

GAIN = 0.5  # DN/electron
READ_NOISE = 5.0  # electron
BIAS = 500.0  # DN
PRNU = 0.01
DARK = 0.02  # electron/s
HOT_SHARE = 1e-4


def write_device(
    folder: Path, size: int, *, bias: int, darks: int, pairs: int, flats: int, serial: str
) -> Path:
    """Write one device's frames; noise is cut at random places from one long run of it."""
    shutil.rmtree(folder, ignore_errors=True)
    folder.mkdir(parents=True)
    rng = np.random.default_rng(size)
    response = 1 + PRNU * rng.standard_normal((size, size), dtype=np.float32)
    pattern = rng.standard_normal((size, size), dtype=np.float32)
    current = np.full((size, size), DARK, np.float32)
    hot = rng.integers(0, size * size, max(4, int(HOT_SHARE * size * size)))
    current.flat[hot] = rng.uniform(20, 50, len(hot))
    noise = rng.standard_normal(size * size + 1_000_003, dtype=np.float32)
    plan = [("bias", 0.0, 0.0)] * bias + [("dark", 60.0, 0.0)] * darks
    plan += [
        ("flat", 1.0 + i, 2000 + i * 80000 / max(pairs, 1)) for i in range(pairs) for _ in "ab"
    ]
    plan += [("flat", 40.0, 50000.0)] * flats
    for number, (kind, exposure, light) in enumerate(plan):
        charge = light * response + current * np.float32(exposure)
        start = int(rng.integers(0, 1_000_003))
        spread = np.sqrt(charge + np.float32(READ_NOISE**2))
        charge += spread * noise[start : start + size * size].reshape(size, size)
        charge += 2 * pattern
        image = np.clip(np.rint(charge * np.float32(GAIN) + np.float32(BIAS)), 0, 65535)
        header = fits.Header()
        header["IMAGETYP"], header["EXPTIME"], header["SERIAL"] = kind, exposure, serial
        header["CCD-TEMP"] = -20.0
        minute, second = divmod(number, 60)
        header["DATE-OBS"] = f"2026-03-01T08:{minute:02d}:{second:02d}"
        name = f"{kind}_{number:04d}.fits"
        fits.PrimaryHDU(image.astype(np.uint16), header).writeto(folder / name)
    return folder
