"""The usual way, for comparison: the same work with numpy, astropy.stats and scipy.ndimage.

``python plain_script.py FOLDER`` prints its answers as JSON.
"""

import json
import sys
from pathlib import Path

import numpy as np
from astropy.io import fits
from astropy.stats import sigma_clip
from scipy import ndimage


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
    dark, dark_variance = combined(stacks[dark_key])
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
    read_noise = gain * np.sqrt(bias_variance.mean())
    current = dark * gain / dark_key[1]
    local = ndimage.median_filter(current, 7)
    hot = current - local > 5
    _, hot_regions = ndimage.label(hot, np.ones((3, 3)))
    response = flat / ndimage.median_filter(flat, 7)
    dead = response < 0.5
    quiet = ~hot
    frames = len(stacks[dark_key])
    dsnu = gain * np.sqrt(max(0.0, dark[quiet].var() - (dark_variance[quiet].mean() / frames)))
    spread = response[quiet].var()
    noise = (flat_variance[quiet] / flat[quiet] ** 2).mean() / len(stacks[main_flat])
    return {
        "conversion_gain": float(gain),
        "read_noise": float(read_noise),
        "dark_current": float(np.median(current)),
        "dsnu": float(dsnu),
        "prnu": float(100 * np.sqrt(max(0.0, spread - noise))),
        "hot_pixels": int(hot.sum()),
        "hot_regions": int(hot_regions),
        "dead_pixels": int(dead.sum()),
    }


if __name__ == "__main__":
    print(json.dumps(main(Path(sys.argv[1]))))
