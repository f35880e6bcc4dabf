"""Bad columns and rows, whole or in part, found by the sum of small departures along them."""

from dataclasses import dataclass

import numpy as np
from numpy.lib.stride_tricks import sliding_window_view
from numpy.typing import NDArray
from scipy.special import ndtr

from sensorgrade.defects.background import Background, Lattice, background
from sensorgrade.defects.stage import POINT, CountName, DefectStage, Found, Line
from sensorgrade.errors import NotMeasured
from sensorgrade.frames.geometry import Region
from sensorgrade.kernels.outside_limits import BIN, line_sums
from sensorgrade.kernels.segments import strongest_stretch
from sensorgrade.measure.stage import Inputs
from sensorgrade.options import number, quantity

CLIP = 4.0  # deviations of a pixel: one hot pixel must not make a column
AROUND = 17  # lines whose median is taken for what a sound line sums to
EVERY = 4  # lines that share such a median
MOST_TIMES = 3  # a second and third stretch of the same line, after the first was taken out


@dataclass(frozen=True, slots=True, kw_only=True)
class LineOptions:
    """Recipe keys under ``stages: lines``."""

    response: float = quantity(
        "%", "Mean departure of response from which a line is bad", default=2.0, minimum=0.0
    )
    dark: float | None = quantity(
        "electron / s",
        "Mean dark current above the local level from which a line is bad; else twice the scatter"
        " of single pixels",
        default=None,
        minimum=0.0,
    )
    shortest: int = number("Pixels of the shortest stretch", default=24, minimum=8)
    significance: float = number(
        "A departure counts only from so many of its standard uncertainties",
        default=7.0,
        minimum=4.0,
    )


COUNTS = (
    CountName(
        "bad_columns",
        ("hot column", "dead column", "dim column", "bright column"),
        "Columns that stand apart, whole or in part",
    ),
    CountName(
        "bad_rows",
        ("hot row", "dead row", "dim row", "bright row"),
        "Rows that stand apart, whole or in part",
    ),
)
DEAD = 50.0  # %: a line that loses more is dead, not dim


def lines(inputs: Inputs, options: LineOptions) -> Found:
    """Lines whose mean departs, in response or in dark current.

    Notes
    -----
    Departures from the local median, in units of the local scatter and clipped, are summed along
    each line; against the median of the lines around it, the stretch whose sum is largest over its
    noise is kept for every length (a scan statistic); the noise includes how much lines differ from
    each other as a whole. So a column that is 1 % low is found although no pixel of it stands out.
    With 4096 lines and all stretches of them, sums past 7 deviations
    occur by chance less than once in a thousand devices. Lines whose mean departure
    is below the threshold are sound however sure it is.
    """
    found: list[Line] = []
    lacking: list[str] = []
    for look in (_response, _dark):
        try:
            for region in inputs.reduced.geometry.regions:
                found.extend(look(inputs, options, region))
        except NotMeasured as missing:
            lacking.append(str(missing))
    if len(lacking) == 2:
        sentence = "; ".join(lacking)
        return Found(np.empty(0, POINT), (), {count.name: sentence for count in COUNTS})
    return Found(points=np.empty(0, POINT), lines=_without_repeats(found), lacking={})


STAGE = DefectStage("lines", LineOptions, lines, COUNTS)


def _response(inputs: Inputs, options: LineOptions, region: Region) -> list[Line]:
    master = inputs.masters.flat
    if master is None:
        raise NotMeasured("needs flat frames to judge the response of lines")

    def named(departure: float, axis: str) -> str:
        kind = "bright" if departure > 0 else "dead" if departure < -DEAD else "dim"
        return f"{kind} {axis}"

    level = background(master.values, region)
    typical = float(np.median(level.middle))
    found = _stretches(master.values, level, options)
    return [
        _line(level.place, one, named(100 * one.departure / typical, one.axis), 100 / typical, "%")
        for one in found
        if abs(100 * one.departure / typical) >= options.response
    ]


def _dark(inputs: Inputs, options: LineOptions, region: Region) -> list[Line]:
    master = inputs.masters.dark
    if master is None or not master.stack.exposure:
        raise NotMeasured(
            "needs bias frames and timed dark frames to judge the dark signal of lines"
        )
    gain = inputs.measured("conversion_gain", region.scope).value
    factor = gain / master.stack.exposure
    level = background(master.values, region)
    limit = options.dark
    if limit is None:
        limit = 2 * float(np.median(level.scatter)) * factor
    found = _stretches(master.values, level, options)
    return [
        _line(level.place, one, f"hot {one.axis}", factor, "electron / s")
        for one in found
        if one.departure * factor >= limit
    ]


@dataclass(frozen=True, slots=True)
class _Stretch:
    """A stretch of line ``index`` along ``axis``, pixels start to stop, in the image's own unit."""

    axis: str
    index: int
    start: int
    stop: int
    departure: float
    uncertainty: float
    significance: float


def _stretches(
    image: NDArray[np.float32], level: Background, options: LineOptions
) -> list[_Stretch]:
    """Every stretch of a column or row of the region that is significant."""
    place = level.place
    scatter = np.maximum(level.scatter, np.float32(1e-12))
    bins = -(-place.rows // BIN), -(-place.columns // BIN)
    down = np.zeros((bins[0], place.columns), np.float32)
    across = np.zeros((place.rows, bins[1]), np.float32)
    line_sums(image, *place.arguments, level.middle, np.float32(1) / scatter, CLIP, down, across)
    found = []
    for axis, sums in (("column", down), ("row", np.ascontiguousarray(across.T))):
        found.extend(_significant(image, level, options, axis, sums))
    return found


def _significant(
    image: NDArray[np.float32],
    level: Background,
    options: LineOptions,
    axis: str,
    sums: NDArray[np.float32],
) -> list[_Stretch]:
    """The strongest stretches along one axis, ends found to the pixel."""
    size = level.place.rows if axis == "column" else level.place.columns
    # What the lines around have in common is shading that the block medians do not follow.
    sums = sums - _around(sums)
    unit = max(_robust(sums), 1e-12)
    centred = sums / np.float32(unit)
    bins = len(centred)
    # Lines differ from each other by more than their pixels' scatter explains.
    between = np.sqrt(max(_robust(centred.mean(axis=0, keepdims=True)) ** 2 - 1 / bins, 0.0))
    own = between * unit / BIN * float(np.median(level.scatter))
    lengths = _lengths(len(centred), max(1, options.shortest // BIN))
    best = np.empty(centred.shape[1], np.float32)
    start, stop = np.empty((2, centred.shape[1]), np.int64)
    found = []
    for _ in range(MOST_TIMES):
        strongest_stretch(centred, lengths, best, start, stop)
        reach = options.significance * np.sqrt(1 + (stop - start) * between**2)
        hits = np.flatnonzero(np.abs(best) >= reach)
        for index in hits:
            first, last = int(start[index]), int(stop[index])
            made = _refined(image, level, axis, int(index), first * BIN, min(last * BIN, size), own)
            if made is not None and made.stop - made.start >= options.shortest:
                found.append(made)
            centred[max(first - 1, 0) : last + 1, index] = 0
        if not len(hits):
            break
    return [one for one in found if one.significance >= options.significance]


def _around(sums: NDArray[np.float32]) -> NDArray[np.float32]:
    """Median of each bin over the lines around, taken anew at every fourth line only."""
    half = AROUND // 2
    padded = np.pad(sums, ((0, 0), (half, half + EVERY)), mode="edge")
    windows = sliding_window_view(padded, AROUND, axis=1)[:, EVERY // 2 :: EVERY]
    middle = np.partition(windows, half, axis=2)[:, :, half]  # five times as fast as np.median
    return np.repeat(middle, EVERY, axis=1)[:, : sums.shape[1]]


def _robust(sums: NDArray[np.float32]) -> float:
    """Half the 68 % range of bin sums."""
    low, high = np.quantile(sums[:, :: max(1, sums.size // (1 << 18))], (0.158655, 0.841345))
    return float(high - low) / 2


def _lengths(bins: int, shortest: int) -> NDArray[np.int64]:
    """Lengths that are tried, each 1.3 times the last, and the whole line."""
    lengths = [min(shortest, bins)]
    while lengths[-1] < bins:
        lengths.append(min(bins, max(lengths[-1] + 1, int(lengths[-1] * 1.3))))
    return np.array(lengths, np.int64)


def _refined(
    image: NDArray[np.float32],
    level: Background,
    axis: str,
    index: int,
    start: int,
    stop: int,
    own: float,
) -> _Stretch | None:
    """The stretch with its ends to the pixel, and its mean departure from the lines beside it.

    ``own`` is the scatter of the lines' means that is not their pixels'.
    """
    place = level.place
    size = place.rows if axis == "column" else place.columns
    values = _departures(image, level, axis, index)
    beside = [
        _departures(image, level, axis, other)
        for other in (index - 3, index - 2, index + 2, index + 3)
        if 0 <= other < (place.columns if axis == "column" else place.rows)
    ]
    if not beside:
        return None
    values = values - np.median(beside, axis=0)
    noise = _spread(values)
    middle = float(np.median(values[start:stop]))
    if middle == 0.0:
        return None
    # Each pixel speaks for or against the stretch by its likelihood ratio, clipped.
    vote = np.clip((values - middle / 2) * np.sign(middle) / noise, -CLIP, CLIP)
    run = np.concatenate([[0.0], np.cumsum(vote)])
    reach = 3 * BIN
    low = np.arange(max(0, start - reach), min(start + reach, stop - 1) + 1)
    start = int(low[np.argmin(run[low])])
    high = np.arange(max(start + 1, stop - reach), min(stop + reach, size) + 1)
    stop = int(high[np.argmax(run[high])])
    part = values[start:stop]
    departure = float(np.median(part))
    error = float(np.hypot(_spread(part) * np.sqrt(np.pi / 2 / len(part)), own))
    return _Stretch(axis, index, start, stop, departure, error, abs(departure) / error)


def _departures(
    image: NDArray[np.float32], level: Background, axis: str, index: int
) -> NDArray[np.float64]:
    """One line of the region less its local median."""
    place = level.place
    if axis == "column":
        rows = place.top + place.row_step * np.arange(place.rows, dtype=np.int32)
        columns = np.full(place.rows, place.left + place.column_step * index, np.int32)
    else:
        columns = place.left + place.column_step * np.arange(place.columns, dtype=np.int32)
        rows = np.full(place.columns, place.top + place.row_step * index, np.int32)
    return image[rows, columns] - level.at(rows, columns, level.middle)


def _spread(values: NDArray[np.float64]) -> float:
    """Half the 68 % range."""
    low, high = np.quantile(values, (0.158655, 0.841345))
    return max(float(high - low) / 2, 1e-12)


def _line(place: Lattice, one: _Stretch, kind: str, factor: float, unit: str) -> Line:
    """A stretch in the assembled image's coordinates and in ``unit``."""
    if one.axis == "column":
        column = place.left + place.column_step * one.index
        rows = (
            place.top + place.row_step * one.start,
            place.top + place.row_step * (one.stop - 1) + 1,
        )
        columns = column, column + 1
    else:
        row = place.top + place.row_step * one.index
        rows = row, row + 1
        columns = (
            place.left + place.column_step * one.start,
            place.left + place.column_step * (one.stop - 1) + 1,
        )
    return Line(
        kind=kind,
        row_start=rows[0],
        row_stop=rows[1],
        column_start=columns[0],
        column_stop=columns[1],
        value=one.departure * factor,
        uncertainty=one.uncertainty * factor,
        unit=unit,
        significance=one.significance,
        probability=float(ndtr(one.significance)),
    )


def _without_repeats(found: list[Line]) -> tuple[Line, ...]:
    """Each stretch once, by its most significant kind; a line can be dim and hot at once."""
    kept: list[Line] = []
    for line in sorted(found, key=lambda one: -one.significance):
        if not any(_share(line, other) for other in kept):
            kept.append(line)
    return tuple(sorted(kept, key=lambda one: (one.column_start, one.row_start)))


def _share(one: Line, other: Line) -> bool:
    """Whether two stretches lie on the same line and overlap."""
    if one.kind.split()[-1] != other.kind.split()[-1]:
        return False
    rows = min(one.row_stop, other.row_stop) - max(one.row_start, other.row_start)
    columns = min(one.column_stop, other.column_stop) - max(one.column_start, other.column_start)
    return rows > 0 and columns > 0
