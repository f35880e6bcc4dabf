"""How a quantity is spread over a lot, and how it went from the first device to the last."""

import math
from collections.abc import Iterable, Sequence
from datetime import UTC, datetime

import numpy as np
from numpy.typing import NDArray

from sensorgrade.recipe.model import Grade, Limit
from sensorgrade.report.lot_values import LotQuantity, Place
from sensorgrade.report.plot import Axis, Mark, Plot, Series
from sensorgrade.wording import doubt_text, name_text, number_text, unit_text

MOST_BINS = 40
APART = 6  # places that are drawn apart; more are drawn as one
MOST_DOTS = 300  # dots of one place in the plot against time
STRETCHES = 24  # medians over time are taken over so many stretches of equal numbers of devices
FEWEST_FOR_DRIFT = 12
SPREAD_OF_MEDIAN = 1.2533  # standard error of a normal sample's median over that of its mean
SURELY = 3.0  # standard errors that a drift must have to be called one
HEADROOM = 1.2  # of a histogram below the labels of its limits
HOUR = 3600.0


def distribution(quantity: LotQuantity, grades: Sequence[Grade], *, key: str) -> Plot:
    """Histogram of a quantity over the devices, place by place, with the limits on it.

    The axis shows the bulk; what lies past its ends is counted into the outmost bins.
    """
    places = _apart(quantity)
    pooled = np.concatenate([place.values[np.isfinite(place.values)] for place in places])
    limits = limits_on(quantity.name, grades)
    low, high = _bulk(pooled, [limit.bound for _, limit in limits])
    edges = _edges(pooled, low, high, quantity.counted)
    beyond = int(np.count_nonzero((pooled < edges[0]) | (pooled > edges[-1])))
    outside = [
        f"{grade} limit {number_text(limit.bound)}"
        for grade, limit in limits
        if not edges[0] <= limit.bound <= edges[-1]
    ]
    caption = _summary(pooled, quantity)
    if beyond:
        caption += f" {beyond} lie past the ends of the axis and are counted in the outmost bins."
    if outside:
        caption += f" Off the axis: {', '.join(outside)}."
    heights = [
        np.histogram(np.clip(place.values[np.isfinite(place.values)], edges[0], edges[-1]), edges)[
            0
        ]
        for place in places
    ]
    tallest = max(int(height.max()) for height in heights)
    return Plot(
        key=key,
        title="Distribution",
        caption=caption,
        alt=f"Histogram of {name_text(quantity.name)} over the lot. {caption}",
        x=Axis(label=_label(quantity), low=float(edges[0]), high=float(edges[-1])),
        y=Axis(label="devices", low=0.0, high=tallest * HEADROOM),
        series=tuple(
            Series(
                label=place.scope,
                x=edges,
                y=height,
                draw="steps",
                colour=index,
            )
            for index, (place, height) in enumerate(zip(places, heights, strict=True))
        ),
        marks=tuple(Mark(label=label, x=bound) for label, bound in _marked(limits)),
    )


def course(
    quantity: LotQuantity, grades: Sequence[Grade], *, taken: NDArray[np.float64], key: str
) -> Plot | None:
    """A quantity against the time of the first frame (D,) [s]; None where no times differ.

    Dots are devices, thinned; the line is the median over stretches of equal numbers of devices.
    """
    places = _apart(quantity)
    known = np.isfinite(taken)
    if np.count_nonzero(known) < 2 or np.ptp(taken[known]) == 0:
        return None
    start = float(taken[known].min())
    length, unit = ("d", 24 * HOUR) if np.ptp(taken[known]) > 72 * HOUR else ("h", HOUR)
    pooled = np.concatenate([place.values[known & np.isfinite(place.values)] for place in places])
    limits = limits_on(quantity.name, grades)
    low, high = _bulk(pooled, [limit.bound for _, limit in limits])
    series: list[Series] = []
    told: list[str] = []
    moves = False
    for index, place in enumerate(places):
        use = np.flatnonzero(known & np.isfinite(place.values))
        if not use.size:
            continue
        use = use[np.argsort(taken[use], kind="stable")]
        time, value = (taken[use] - start) / unit, place.values[use]
        thin = np.unique(np.linspace(0, use.size - 1, MOST_DOTS).astype(int))
        series.append(Series(label=place.scope, x=time[thin], y=value[thin], colour=index))
        if use.size >= 2 * FEWEST_FOR_DRIFT:
            parts = np.array_split(np.arange(use.size), min(STRETCHES, use.size // 6))
            series.append(
                Series(
                    label="",
                    x=np.array([np.median(time[part]) for part in parts]),
                    y=np.array([np.median(value[part]) for part in parts]),
                    draw="line",
                    colour=index,
                )
            )
        if use.size >= FEWEST_FOR_DRIFT:
            change, error = _change(value)
            moves = moves or abs(change) > SURELY * error
            where = "" if place.scope == "device" else f"{place.scope} "
            sign = "+" if change > 0 else ""
            told.append(f"{where}{sign}{doubt_text(change, error, quantity.unit)}")
    caption = "Too few devices to tell a drift from chance."
    if told:
        caption = f"Median of the last quarter less that of the first: {'; '.join(told)}."
        caption += "" if moves else " No drift beyond chance."
    begun = datetime.fromtimestamp(start, UTC).strftime("%Y-%m-%d %H:%M UTC")
    return Plot(
        key=key,
        title="In order of time",
        caption=caption,
        alt=f"{name_text(quantity.name)} against time. {caption}",
        x=Axis(label=f"time since {begun} [{length}]"),
        y=Axis(label=_label(quantity), low=low, high=high),
        series=tuple(series),
        marks=tuple(Mark(label=label, y=bound) for label, bound in _marked(limits)),
    )


def limits_on(name: str, grades: Iterable[Grade]) -> list[tuple[str, Limit]]:
    """Limits on a quantity that a plot of its plain values can carry, best grade first.

    Those for another temperature, for one place or for a mean of places hold for other numbers.
    """
    return [
        (grade.name, limit)
        for grade in grades
        for limit in grade.limits
        if limit.name == name
        and limit.temperature is None
        and limit.scope is None
        and limit.zone is None
        and limit.of != "mean"
    ]


def _apart(quantity: LotQuantity) -> tuple[Place, ...]:
    """The places that are drawn; with too many of them, all values of a device as one place."""
    if len(quantity.places) <= APART:
        return quantity.places
    if any(place.scope == "device" for place in quantity.places):
        return tuple(place for place in quantity.places if place.scope == "device")
    every = np.array([place.values for place in quantity.places])
    measured = np.isfinite(every)
    sums = np.where(measured, every, 0.0).sum(axis=0)
    with np.errstate(invalid="ignore"):
        mean = sums / measured.sum(axis=0)
    return (Place(f"mean of {len(quantity.places)} places", mean),)


def _bulk(values: NDArray[np.float64], bounds: Sequence[float]) -> tuple[float, float]:
    """A range that shows the bulk of the values, and the limits that are not far from it."""
    low, high = (float(one) for one in np.percentile(values, (0.5, 99.5)))
    wide = high - low or max(abs(high), 1.0) * 0.1
    low, high = (
        max(low - 0.15 * wide, float(values.min())),
        min(high + 0.15 * wide, float(values.max())),
    )
    near = [bound for bound in bounds if low - 2 * wide <= bound <= high + 2 * wide]
    low, high = min([low, *near]), max([high, *near])
    rim = 0.04 * (high - low) or wide
    return low - rim, high + rim


def _edges(
    values: NDArray[np.float64], low: float, high: float, counted: bool
) -> NDArray[np.float64]:
    """Edges of bins of equal width; those of counts lie between whole numbers."""
    bins = int(np.clip(np.ceil(2 * np.cbrt(values.size)), 8, MOST_BINS))
    if not counted:
        return np.linspace(low, high, bins + 1)
    first, last = np.floor(max(low, 0.0)), np.ceil(high)
    step = max(1.0, np.ceil((last - first + 1) / bins))
    return np.asarray(np.arange(first, last + step + 0.5, step) - 0.5, dtype=np.float64)


def _summary(values: NDArray[np.float64], quantity: LotQuantity) -> str:
    """Median and the middle two thirds, in words."""
    low, median, high = np.percentile(values, (15.87, 50, 84.13))
    unit = unit_text(quantity.unit)
    if low == high:
        return f"{number_text(float(median))} {unit}".rstrip() + " for most devices."
    text = f"Median {number_text(float(median))}, middle two thirds "
    text += f"{number_text(float(low))} to {number_text(float(high))} {unit}".rstrip()
    return text + "."


def _change(values: NDArray[np.float64]) -> tuple[float, float]:
    """Difference of the medians of the last and the first quarter, and its standard error."""
    quarter = values.size // 4
    parts = values[:quarter], values[values.size - quarter :]
    errors = []
    for part in parts:
        lower, upper = np.percentile(part, (15.87, 84.13))
        errors.append(SPREAD_OF_MEDIAN * float(upper - lower) / 2)
    change = float(np.median(parts[1]) - np.median(parts[0]))
    return change, math.hypot(*errors) / quarter**0.5


def _label(quantity: LotQuantity) -> str:
    unit = unit_text(quantity.unit) if quantity.unit else "1" if not quantity.counted else ""
    return f"{name_text(quantity.name)} [{unit}]" if unit else name_text(quantity.name)


def _marked(limits: Iterable[tuple[str, Limit]]) -> list[tuple[str, float]]:
    """One label for each bound, with all grades that share it."""
    grades: dict[tuple[str, float], list[str]] = {}
    for grade, limit in limits:
        sign = "≤" if limit.relation == "<=" else "≥"
        grades.setdefault((sign, limit.bound), []).append(grade)
    return [
        (f"{', '.join(dict.fromkeys(names))} {sign} {number_text(bound)}", bound)
        for (sign, bound), names in grades.items()
    ]
