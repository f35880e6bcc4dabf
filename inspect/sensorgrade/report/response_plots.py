"""Plots of the stages that look at light: saturation, linearity, response uniformity."""

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from sensorgrade.measure.linearity import LinearityResult
from sensorgrade.measure.response_uniformity import ResponseUniformityResult
from sensorgrade.measure.saturation import SaturationResult
from sensorgrade.report.noise_plots import drawn_regions, listed
from sensorgrade.report.plot import Axis, Mark, Plot, Series
from sensorgrade.wording import number_text

MOST_LINES = 1000  # rows or columns of a profile that are drawn


def saturation_plots(result: SaturationResult) -> tuple[Plot, ...]:
    """Variance on plain axes up to where it peaks."""
    regions, more = drawn_regions(result.regions)
    ends = listed(
        f"{one.scope} at {number_text(one.level)} DN, {one.limit} first" for _, one in regions
    )
    return (
        Plot(
            key="saturation",
            title="Saturation",
            caption="Variance against signal on plain axes; the dotted upright is where it peaks"
            f" ({ends}). Look for a peak that comes long before the last levels.{more}",
            alt=f"Variance against signal up to saturation. {ends}.",
            x=Axis(label="signal above bias [DN]"),
            y=Axis(label="variance [DN²]", low=0.0),
            series=tuple(
                Series(label=one.scope, x=one.curve.signal, y=one.curve.variance, colour=colour)
                for colour, one in regions
            ),
            marks=tuple(
                Mark(label=f"{one.scope}", x=one.level) for _, one in regions if len(regions) <= 3
            ),
        ),
    )


def linearity_plots(result: LinearityResult) -> tuple[Plot, ...]:
    """Signal against light with the line, and the departures from it."""
    regions, more = drawn_regions(result.regions)
    series: list[Series] = []
    lower: list[Series] = []
    for colour, one in regions:
        series.append(Series(label=one.scope, x=one.light, y=one.signal, colour=colour))
        span = np.array([one.light[one.used].min(), one.light[one.used].max()])
        series.append(
            Series(
                label="",
                x=span,
                y=one.fit.intercept + one.fit.slope * span,
                draw="line",
                colour=colour,
            )
        )
        lower.append(Series(label="", x=one.light[one.used], y=one.fit.departure, colour=colour))
    by = regions[0][1].by
    return (
        Plot(
            key="linearity",
            title="Linearity",
            caption="Signal against light, and the line through the levels used. Below, how far the"
            " signal lies from the line. Look for a bow (the amplifier) or for a hook at the end"
            f" (saturation).{more}",
            alt="Signal against light with a straight line, and departures from it.",
            x=Axis(label=f"light, by {by} [{'s' if by == 'exposure' else 'recipe unit'}]"),
            y=Axis(label="signal above bias [DN]"),
            series=tuple(series),
            lower=tuple(lower),
            lower_y=Axis(label="off by [%]"),
        ),
    )


def response_uniformity_plots(result: ResponseUniformityResult) -> tuple[Plot, ...]:
    """Means of rows and of columns, the smooth shading taken out."""
    regions, more = drawn_regions(result.regions)
    named = [(one.scope, one.noise.row_profile, one.noise.column_profile) for _, one in regions]
    return profile_plots(
        named,
        key="response",
        title="Response",
        unit="%",
        factor=100.0,
        caption="Look for single spikes (bad lines) and for a comb (column amplifiers)." + more,
    )


def profile_plots(
    profiles: Sequence[tuple[str, NDArray[np.float64], NDArray[np.float64]]],
    *,
    key: str,
    title: str,
    unit: str,
    factor: float,
    caption: str,
) -> tuple[Plot, ...]:
    """A plot of row means and one of column means; ``profiles`` are scope, rows, columns."""
    made = []
    for along, which in (("row", 1), ("column", 2)):
        series = []
        for colour, one in enumerate(profiles):
            profile = np.asarray(one[which], dtype=np.float64)
            if profile.size:
                x, y = _extremes(factor * profile)
                series.append(Series(label=one[0], x=x, y=y, draw="line", colour=colour))
        if series:
            made.append(
                Plot(
                    key=f"{key}-{along}s",
                    title=f"{title}, {along} by {along}",
                    caption=f"Mean of each {along} less the smooth shading. {caption}",
                    alt=f"{title} of each {along}.",
                    x=Axis(label=f"{along} in its section"),
                    y=Axis(label=f"departure [{unit}]"),
                    series=tuple(series),
                )
            )
    return tuple(made)


def _extremes(
    profile: NDArray[np.float64],
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Places and values of a profile; a long one keeps lowest and highest of every stretch."""
    if profile.size <= MOST_LINES:
        return np.arange(profile.size, dtype=np.float64), profile
    step = -(-2 * profile.size // MOST_LINES)
    kept: list[int] = []
    for start in range(0, profile.size, step):
        part = profile[start : start + step]
        kept += sorted({start + int(np.argmin(part)), start + int(np.argmax(part))})
    places = np.array(kept)
    return places.astype(np.float64), profile[places]
