"""What the histogram of codes says of the converter: stuck bits, missing codes, wrong range."""

from collections.abc import Iterator

import numpy as np
from numpy.lib.stride_tricks import sliding_window_view
from numpy.typing import NDArray

from sensorgrade.measurement import Finding

LEAST_SAMPLES = 10_000
LEAST_SPAN = 4  # times a bit's weight that the codes must span before the bit is judged
EXPECTED = 50.0  # counts of the codes around one that is missing
NEIGHBOURS = 4  # on either side
WHERE = "converter"
NOISE_NAMES = ("conversion_gain", "read_noise", "linearity_error")


def converter_findings(histogram: NDArray[np.int64], *, bits: int | None) -> Iterator[Finding]:
    """Findings from counts (65536,) of raw codes over all frames.

    ``bits`` is the converter's resolution where the recipe gives it.
    """
    codes = np.flatnonzero(histogram)
    if histogram.sum() < LEAST_SAMPLES or len(codes) < 2:
        return
    if bits is not None and bits < 16 and codes[-1] >= 1 << bits:
        yield Finding(
            "error",
            WHERE,
            f"samples reach {codes[-1]}, a converter of {bits} bits ends at {(1 << bits) - 1}",
            "correct sensor.adc_bits, or the camera's alignment of bits",
            ("saturation_capacity", "dynamic_range", "linearity_error"),
        )
    stuck = _stuck_bits(codes)
    low = 0
    while low in stuck:
        low += 1
    if low and all(stuck[bit] == 0 for bit in range(low)):
        yield Finding(
            "warning",
            WHERE,
            f"every code is a multiple of {1 << low}: the lowest {low} bit(s) are always 0",
            "if the converter has fewer bits than the samples, nothing; else check its cable",
        )
        stuck = {bit: value for bit, value in stuck.items() if bit >= low}
    if stuck:
        listed = ", ".join(f"bit {bit} always {value}" for bit, value in stuck.items())
        yield Finding(
            "error",
            WHERE,
            f"stuck bits: {listed} over {codes[-1] - codes[0] + 1} codes",
            "check the converter and its cable, take the set again",
            NOISE_NAMES,
        )
        return
    missing = _missing_codes(histogram[:: 1 << low]) << low
    if len(missing):
        listed = ", ".join(map(str, missing[:5]))
        yield Finding(
            "warning",
            WHERE,
            f"missing codes: {len(missing)} codes never occur where they should, such as {listed}",
            "check for rescaling in the camera, and the converter's linearity",
            ("linearity_error",),
        )


def _stuck_bits(codes: NDArray[np.int64]) -> dict[int, int]:
    """Bits that are the same in every code although the codes span enough to change them."""
    span = int(codes[-1] - codes[0])
    always = int(np.bitwise_and.reduce(codes))
    ever = int(np.bitwise_or.reduce(codes))
    return {
        bit: int(bool(always >> bit & 1))
        for bit in range(16)
        if span >= LEAST_SPAN << bit and (always >> bit & 1 or not ever >> bit & 1)
    }


def _missing_codes(histogram: NDArray[np.int64]) -> NDArray[np.int64]:
    """Codes without counts whose neighbours, by their median, have many on both sides."""
    width = 2 * NEIGHBOURS + 1
    if len(histogram) < width:
        return np.empty(0, np.int64)
    totals = np.concatenate([[0], np.cumsum(histogram)])
    # Both medians past EXPECTED need at least half of each side's counts to be so.
    busy = totals[width:] - totals[:-width] > NEIGHBOURS * EXPECTED
    empty = np.flatnonzero(busy & (histogram[NEIGHBOURS:-NEIGHBOURS] == 0))
    around = sliding_window_view(histogram, width)[empty]
    below = np.median(around[:, :NEIGHBOURS], axis=1)
    above = np.median(around[:, NEIGHBOURS + 1 :], axis=1)
    missing: NDArray[np.int64] = empty[(below > EXPECTED) & (above > EXPECTED)] + NEIGHBOURS
    return missing
