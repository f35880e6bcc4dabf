"""Where numbers fall on an axis, and which of them carry a tick."""

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sensorgrade.report.plot import Axis, Series
from sensorgrade.wording import SUPERSCRIPTS, number_text

FEWEST_TICKS = 3


@dataclass(frozen=True, slots=True)
class Scale:
    """The range of an axis, linear or logarithmic."""

    low: float
    high: float
    log: bool

    def place(self, values: NDArray[np.float64]) -> NDArray[np.float64]:
        """Position of each value, 0 at ``low`` and 1 at ``high``; NaN where it has none."""
        if self.log:
            with np.errstate(divide="ignore", invalid="ignore"):
                logarithm = np.where(values > 0, np.log10(values), np.nan)
            low, high = math.log10(self.low), math.log10(self.high)
            return (logarithm - low) / (high - low)
        return (values - self.low) / (self.high - self.low)

    def ticks(self, most: int) -> list[tuple[float, str]]:
        """At most about ``most`` round values inside the range, each with its text.

        The texts are those of the values over the power of ten that `label` puts into the unit.
        """
        if self.log:
            return _decades(self.low, self.high, most)
        step, values, power = self._round_values(most)
        places = max(0, -math.floor(math.log10(step) + 1e-9) + power)
        return [
            (
                value,
                "0"
                if abs(value) < step / 2
                else f"{value / 10.0**power:.{places}f}".replace("-", "−"),
            )
            for value in values
        ]

    def label(self, text: str, most: int) -> str:
        """The axis label ``text``, its unit with the power of ten that the ticks leave out."""
        power = 0 if self.log else self._round_values(most)[2]
        if not power:
            return text
        head, bracket, unit = text.rpartition("[")
        if not bracket:
            head, unit = f"{text} ", "1]"
        unit = "]" if unit == "1]" else f" {unit}"
        return f"{head}[10{str(power).translate(SUPERSCRIPTS)}{unit}"

    def _round_values(self, most: int) -> tuple[float, list[float], int]:
        """Step, values and the power of ten, a multiple of 3, that their texts are taken over."""
        span = self.high - self.low
        step = 10.0 ** math.floor(math.log10(span / most))
        for factor in (1, 2, 5, 10):
            if span / (step * factor) <= most:
                step *= factor
                break
        first, last = math.ceil(self.low / step - 1e-9), math.floor(self.high / step + 1e-9)
        values = [index * step for index in range(first, last + 1)]
        largest = max((abs(value) for value in values), default=0.0)
        exponent = math.floor(math.log10(largest)) if largest else 0
        return step, values, 3 * (exponent // 3) if exponent >= 5 or exponent < -3 else 0


def _decades(low: float, high: float, most: int) -> list[tuple[float, str]]:
    """Powers of ten, thinned; where the range holds fewer than two, values between them."""
    first, last = math.floor(math.log10(low)), math.ceil(math.log10(high))
    powers = range(first, last + 1)
    inside = [p for p in powers if low * (1 - 1e-9) <= 10.0**p <= high * (1 + 1e-9)]
    if len(inside) >= 2:
        stride = max(1, math.ceil(len(inside) / most))
        return [(10.0**p, _power_text(p)) for p in inside[::stride]]
    for factors in ((1, 2, 5), (1, 2, 3, 4, 5, 6, 8)):
        values = [f * 10.0**p for p in powers for f in factors if low <= f * 10.0**p <= high]
        if len(values) >= FEWEST_TICKS:
            break
    else:
        _, values, _ = Scale(low, high, log=False)._round_values(most)
    return [(value, number_text(value)) for value in values]


def _power_text(power: int) -> str:
    return f"{10**power:g}" if -2 <= power <= 3 else f"10{str(power).translate(SUPERSCRIPTS)}"


def scale(axis: Axis, series: tuple[Series, ...], along: str) -> Scale:
    """The range that shows every finite value of ``series`` along ``"x"`` or ``"y"``, with a rim.

    A logarithmic axis shows the positive values only.
    """
    parts = [np.asarray(getattr(one, along), dtype=np.float64).ravel() for one in series]
    if along == "y":
        for one, part in zip(series, tuple(parts), strict=True):
            if one.y_error is not None:
                parts += [part - one.y_error, part + one.y_error]
    values = np.concatenate(parts) if parts else np.empty(0)
    values = values[np.isfinite(values) & ((values > 0) | (not axis.log))]
    low = float(values.min()) if values.size else 1.0
    high = float(values.max()) if values.size else 10.0
    if axis.log:
        rim = (high / low) ** 0.05 if high > low else 2.0
        low, high = low / rim, high * rim
    else:
        rim = 0.05 * (high - low) if high > low else max(abs(high), 1.0) * 0.05
        low, high = low - rim, high + rim
    return Scale(
        low if axis.low is None else axis.low, high if axis.high is None else axis.high, axis.log
    )
