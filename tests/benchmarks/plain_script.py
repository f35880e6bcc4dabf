"""The usual way, for comparison: the same work with numpy, astropy.stats and scipy.ndimage.

``python plain_script.py FOLDER`` prints its answers as JSON. Quantities are defined as the tool
defines them, so that the answers must agree: read noise without quantisation, dark current the mean
over all pixels, DSNU that of the bias, PRNU that of the flat, each less its temporal noise.
"""

import json
import sys
from pathlib import Path

import numpy as np
from astropy.io import fits
from astropy.stats import sigma_clip
from scipy import ndimage

QUANTISATION = 1 / 12  # DN²


def load(paths):
    return np.stack([fits.getdata(path).astype(np.float32) for path in paths])


def combined(paths):
    clipped = sigma_clip(load(paths), sigma=5, axis=0, maxiters=2, masked=True)
    return clipped.mean(axis=0).filled(np.nan), clipped.var(axis=0, ddof=1).filled(np.nan)


def main(folder: Path) -> dict[str, float]:
    stacks: dict[tuple[str, float], list[Path]] = {}
    for path in sorted(folder.glob("*.fits")):
        header = fits.getheader(path)
        stacks.setdefault((header["IMAGETYP"], header["EXPTIME"]), []).append(path)
    bias, bias_variance = combined(stacks[("bias", 0.0)])
    (dark_key,) = [key for key in stacks if key[0] == "dark"]
    dark, _ = combined(stacks[dark_key])
    dark -= bias
    flat_keys = sorted(key for key in stacks if key[0] == "flat")
    main_flat = max(flat_keys, key=lambda key: len(stacks[key]))
    flat, flat_variance = combined(stacks[main_flat])
    flat -= bias
    signal, variance = [], []
    for key in flat_keys:
        if len(stacks[key]) == 2:
            first, second = load(stacks[key])
            signal.append(((first + second) / 2 - bias).mean())
            difference = sigma_clip((first - second).ravel(), sigma=5, maxiters=2, masked=True)
            variance.append(difference.var() / 2)
    slope, _ = np.polyfit(signal, variance, 1, w=1 / np.array(variance))
    gain = 1 / slope
    read_noise = gain * np.sqrt(bias_variance.mean() - QUANTISATION)
    current = dark * gain / dark_key[1]
    local = ndimage.median_filter(current, 7)
    hot = current - local > 5
    ndimage.label(hot, np.ones((3, 3)))
    response = flat / ndimage.median_filter(flat, 7)
    dead = response < 0.5
    offset_noise = bias_variance.mean() / len(stacks["bias", 0.0])
    dsnu = gain * np.sqrt(bias.var() - offset_noise)
    flat_noise = flat_variance.mean() / len(stacks[main_flat]) + offset_noise
    prnu = 100 * np.sqrt(flat.var() - flat_noise) / flat.mean()
    return {
        "conversion_gain": float(gain),
        "read_noise": float(read_noise),
        "dark_current": float(current.mean(dtype=np.float64)),
        "dsnu": float(dsnu),
        "prnu": float(prnu),
        "hot_pixels": int(hot.sum()),
        "dead_pixels": int(dead.sum()),
    }


if __name__ == "__main__":
    print(json.dumps(main(Path(sys.argv[1]))))
