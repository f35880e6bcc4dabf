"""Charge traps that flats show: from some row on, a column loses the same charge at every level."""

from dataclasses import dataclass
from math import sqrt

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import uniform_filter1d
from scipy.special import ndtr

from sensorgrade.defects.stage import POINT, CountName, DefectStage, Found, Line
from sensorgrade.errors import NotMeasured
from sensorgrade.frames.geometry import Output
from sensorgrade.masters.reduced import StackImage
from sensorgrade.measure.crosstalk import in_reading_order
from sensorgrade.measure.spatial_noise import MAD_TO_SD
from sensorgrade.measure.stage import Inputs
from sensorgrade.options import number, quantity

Image = NDArray[np.float32]
Floats = NDArray[np.float64]
AROUND = 9  # columns about each that tell what it should hold
CLIP = 4.0  # deviations of one pixel, so that defects of single pixels make no trap
SHORTEST = 8  # rows beyond the trap
OUTLIER = 5.0
FEWEST_LEVELS = 2
EMPTIED = 0.8  # share of the charge lost past which a level no longer tells the capacity
SAME_LEVEL = 0.1  # relative difference of signals that are one level


@dataclass(frozen=True, slots=True, kw_only=True)
class ColumnTrapOptions:
    """Recipe keys under ``stages: column_traps``."""

    capacity: float = quantity(
        "electron", "Charge taken from every packet from which on it is a trap", default=50.0
    )
    significance: float = number(
        "A loss counts only from so many of its standard uncertainties", default=7.0, minimum=5.0
    )


COUNTS = (
    CountName(
        "traps",
        ("trap column", "trap"),
        "Charge traps: columns that lose a fixed charge from some row on, and dipoles of pumping",
    ),
)


@dataclass(frozen=True, slots=True)
class Level:
    """One flat of an output in reading order [electron].

    ``departure`` (M, N) from the columns around, ``scatter`` its robust deviation, ``noise`` the
    part of it that is new in every frame, ``signal`` the median.
    """

    departure: Image
    scatter: float
    noise: float
    signal: float


def column_traps(inputs: Inputs, options: ColumnTrapOptions) -> Found:
    """Columns that lose a fixed charge, with the row of the trap and its capacity [electron].

    Notes
    -----
    In the dimmest flat each column, less the mean of the eight about it, is searched for the row
    from which on it is low (the step whose likelihood is largest, single pixels clipped). The loss
    beyond that row at every level of light is then fitted by capacity + share * signal: a trap
    takes a capacity, a dim column a share, a dead one both. A level whose packets the trap
    empties does not count. With 4096 columns of 4096 rows, 7 deviations of a step occur by chance
    less than once in 10,000 devices.
    """
    try:
        found = [
            line
            for output in inputs.reduced.geometry.outputs
            for line in _of_output(inputs, output, options)
        ]
    except NotMeasured as missing:
        return Found(np.empty(0, POINT), (), {count.name: str(missing) for count in COUNTS})
    return Found(points=np.empty(0, POINT), lines=tuple(found), lacking={})


STAGE = DefectStage("column_traps", ColumnTrapOptions, column_traps, COUNTS)


def _of_output(inputs: Inputs, output: Output, options: ColumnTrapOptions) -> list[Line]:
    if inputs.sensor.technology == "cmos":
        raise NotMeasured("does not apply to a CMOS sensor, which reads pixels without moving them")
    if inputs.reduced.bias is None:
        raise NotMeasured("needs bias frames, to know what flats hold")
    region = next(r for r in inputs.reduced.geometry.regions if r.output == output.name)
    gain = inputs.measured("conversion_gain", region.scope).value
    bias = in_reading_order(inputs.reduced.bias.mean, output)
    flats = _flats(inputs.reduced.flats, bias, output, gain)
    levels = [_level(image, bias, output, gain) for image in flats]
    lines = []
    for column, first in _steps(levels[0], options):
        line = _judged(levels, output, column, first, options)
        if line is not None:
            lines.append(line)
    return lines


def _flats(
    flats: tuple[StackImage, ...], bias: Image, output: Output, gain: float
) -> list[StackImage]:
    """One flat of each level, dimmest first; of flats alike the one of most frames."""
    by_signal = sorted(
        ((gain * float(np.median(in_reading_order(f.mean, output) - bias)), f) for f in flats),
        key=lambda one: one[0],
    )
    chosen: list[tuple[float, StackImage]] = []
    for signal, flat in by_signal:
        if signal <= 0:
            continue
        if chosen and signal < (1 + SAME_LEVEL) * chosen[-1][0]:
            if flat.frames > chosen[-1][1].frames:
                chosen[-1] = signal, flat
        else:
            chosen.append((signal, flat))
    if len(chosen) < FEWEST_LEVELS:
        raise NotMeasured(
            f"needs flats of three or more frames at {FEWEST_LEVELS} or more levels, one of them"
            " low, to tell a trap from a dim column"
        )
    return [flat for _, flat in chosen]


def _level(flat: StackImage, bias: Image, output: Output, gain: float) -> Level:
    signal = np.float32(gain) * (in_reading_order(flat.mean, output) - bias)
    total = uniform_filter1d(signal, AROUND, axis=1, mode="constant") * np.float32(AROUND)
    columns = np.arange(signal.shape[1])
    others = np.minimum(columns, AROUND // 2) + np.minimum(columns[::-1], AROUND // 2)
    departure = signal - (total - signal) / np.maximum(others, 1).astype(np.float32)
    sample = departure[:: max(1, len(departure) // 512)]
    scatter = MAD_TO_SD * float(np.median(np.abs(sample - np.median(sample))))
    at = output.place.slices
    variance = gain**2 * float(np.mean(flat.variance[at] / np.maximum(flat.count[at], 1)))
    return Level(
        departure=departure,
        scatter=max(scatter, 1e-6),
        noise=sqrt(variance * AROUND / (AROUND - 1)),
        signal=float(np.median(signal)),
    )


def _steps(level: Level, options: ColumnTrapOptions) -> list[tuple[int, int]]:
    """(column, first row that is low) of every column whose step is significant."""
    clipped = np.clip(level.departure / level.scatter, -CLIP, CLIP)
    total = -np.cumsum(clipped[::-1], axis=0, dtype=np.float64)[::-1]
    rows = np.arange(len(clipped), 0, -1)
    deviation = total / np.sqrt(rows)[:, None]
    deviation[rows < SHORTEST] = 0.0
    best = np.argmax(deviation, axis=0)
    size = deviation[best, np.arange(len(best))]
    return [
        (int(column), _refined(level, int(column), int(best[column])))
        for column in np.flatnonzero(size >= options.significance)
    ]


def _refined(level: Level, column: int, first: int) -> int:
    """The row of the step that is likeliest for the loss beyond it."""
    x = level.departure[:, column].astype(np.float64)
    for _ in range(3):
        loss = -float(np.median(x[first:]))
        held = np.clip(x, -loss - CLIP * level.scatter, CLIP * level.scatter)
        gained = -2 * held - loss  # log-likelihood of the step against none, over loss / 2 sd²
        first = int(np.argmax(np.cumsum(gained[::-1])[::-1][: len(x) - SHORTEST + 1]))
    return first


def _judged(
    levels: list[Level], output: Output, column: int, first: int, options: ColumnTrapOptions
) -> Line | None:
    """The trap, if what is lost beyond its row is a fixed charge."""
    loss, doubt, signal = [], [], []
    for level in levels:
        mean, error = _loss(level, column, first)
        if mean < EMPTIED * level.signal:
            loss.append(mean)
            doubt.append(error)
            signal.append(level.signal)
    if len(loss) < FEWEST_LEVELS:
        return None
    capacity, uncertainty = _fixed_part(np.array(loss), np.array(doubt), np.array(signal))
    if capacity < options.capacity or capacity < options.significance * uncertainty:
        return None
    place = output.place
    rows, columns = place.shape
    top, right = output.corner.startswith("top"), output.corner.endswith("right")
    start, stop = (0, rows - first) if top else (first, rows)
    at = columns - 1 - column if right else column
    return Line(
        kind="trap column",
        row_start=place.row_start + start,
        row_stop=place.row_start + stop,
        column_start=place.column_start + at,
        column_stop=place.column_start + at + 1,
        value=capacity,
        uncertainty=uncertainty,
        unit="electron",
        significance=capacity / uncertainty,
        probability=float(ndtr((capacity - options.capacity) / uncertainty)),
    )


def _loss(level: Level, column: int, first: int) -> tuple[float, float]:
    """Mean charge missing beyond the row [electron] and its error, outliers left out.

    The pixels' response, which is in proportion to signal, goes into the share, not into the
    capacity; so only noise that is new in every frame makes the error.
    """
    x = -level.departure[first:, column].astype(np.float64)
    kept = x[np.abs(x - np.median(x)) <= OUTLIER * level.scatter]
    return float(kept.mean()), level.noise / sqrt(len(kept))


def _fixed_part(loss: Floats, doubt: Floats, signal: Floats) -> tuple[float, float]:
    """Capacity and its uncertainty from loss = capacity + share * signal, weighted."""
    weight = 1 / doubt**2
    centre = float(weight @ signal / weight.sum())
    spread = float(weight @ (signal - centre) ** 2)
    share = float(weight @ ((signal - centre) * loss)) / spread
    capacity = float(weight @ loss / weight.sum()) - share * centre
    return capacity, sqrt(1 / float(weight.sum()) + centre**2 / spread)
