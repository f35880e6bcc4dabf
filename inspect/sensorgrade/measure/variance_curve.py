"""Temporal variance against signal in bins of signal, and where it peaks."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sensorgrade.measure.pair_points import PairPoints

CELLS = 2048  # fine cells of signal, from zero to the brightest
WIDEST = 16  # cells that one bin may span
GAP = 4  # empty cells that end a bin, so that one light level is never torn in two
FALL = 0.1  # the variance must fall by this share after its peak for saturation to be certain
AT_END = 1e-3  # share of samples at the converter's end that counts as reaching it


@dataclass(frozen=True, slots=True)
class VarianceCurve:
    """Mean signal [DN], variance [DN²], its standard error and the share of saturated samples."""

    signal: NDArray[np.float64]
    variance: NDArray[np.float64]
    standard_error: NDArray[np.float64]
    saturated: NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Peak:
    """Where the variance is greatest: bin of the curve, and the signals it lies between [DN].

    ``limit`` says what ended the rise: "full well", or "converter" when its end code came first.
    """

    index: int
    lower: float
    upper: float
    limit: str


def variance_curve(points: Sequence[PairPoints]) -> VarianceCurve:
    """All tiles of all pairs, joined in bins of signal no wider than 1/128 of the brightest.

    Tiles of a vignetted field reach saturation at different exposures; joined by signal they
    make one curve.
    """
    signal = np.concatenate([p.signal for p in points])
    variance = np.concatenate([p.variance for p in points])
    degrees = np.concatenate([p.degrees for p in points])
    saturated = np.concatenate([p.saturated for p in points])
    top = float(signal.max())
    cell = np.clip((signal * (CELLS / top)).astype(np.int64), 0, CELLS - 1)
    index = _bins(np.bincount(cell, minlength=CELLS) > 0)[cell]
    weight = np.bincount(index, degrees)
    filled = weight > 0
    weight = weight[filled]

    def mean(values: NDArray[np.float64]) -> NDArray[np.float64]:
        found: NDArray[np.float64] = np.bincount(index, degrees * values)[filled] / weight
        return found

    mean_variance = mean(variance)
    return VarianceCurve(
        signal=mean(signal),
        variance=mean_variance,
        standard_error=mean_variance * np.sqrt(2 / weight),
        saturated=mean(saturated),
    )


def _bins(occupied: NDArray[np.bool_]) -> NDArray[np.int64]:
    """Bin number of each cell (CELLS,): a bin ends at a gap or when it is wide enough."""
    number = np.zeros(len(occupied), np.int64)
    current, start, last = 0, -1, -1
    for cell in map(int, np.flatnonzero(occupied)):
        if start >= 0 and (cell - last > GAP or cell - start >= WIDEST):
            current, start = current + 1, cell
        if start < 0:
            start = cell
        number[cell], last = current, cell
    return number


def variance_peak(curve: VarianceCurve) -> Peak | None:
    """The greatest variance of the curve, or None when it still rises at the brightest level.

    It is the brightest bin that equals the highest variance within two standard errors of their
    difference, since the rise is slow and the collapse steep. Every brighter bin lies lower, and
    the lowest by more than a tenth, so that one noisy point cannot be taken for saturation.
    """
    top = int(np.argmax(curve.variance))
    error = np.hypot(curve.standard_error, curve.standard_error[top])
    index = int(np.flatnonzero(curve.variance >= curve.variance[top] - 2 * error)[-1])
    after = curve.variance[index + 1 :]
    if after.size == 0 or after.min() > (1 - FALL) * curve.variance[top]:
        return None
    at_end = curve.saturated[index : index + 2].max() > AT_END
    below = float(curve.signal[index] - curve.signal[max(index - 1, 0)])
    step = max(below, float(curve.signal[index + 1] - curve.signal[index]))
    # A bin past the peak still counts as the highest while it lies within about one and a half
    # deviations of the pixels' noise, because the collapse is not at once.
    past = min(step / 2, 1.5 * float(np.sqrt(curve.variance[index])))
    lower = float(curve.signal[index]) - past
    return Peak(
        index=index,
        lower=lower,
        upper=lower + step,
        limit="converter" if at_end else "full well",
    )
