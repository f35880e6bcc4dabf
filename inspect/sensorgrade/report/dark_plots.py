"""Plots of the stages that look at darks: dark current, its spread, its law, its uniformity."""

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray
from scipy.stats import norm

from sensorgrade.measure.dark_current import BULK_BINS, DarkCurrentResult, RegionDarkCurrent
from sensorgrade.measure.dark_uniformity import DarkUniformityResult
from sensorgrade.report.noise_plots import drawn_regions, listed
from sensorgrade.report.plot import Axis, Plot, Series
from sensorgrade.report.response_plots import profile_plots
from sensorgrade.wording import doubt_text, number_text

LEAST_SHOWN = 0.3  # pixels, below which the bulk's curve is not drawn
TAIL = 5.0  # standard deviations above the bulk where the tail begins


def dark_current_plots(result: DarkCurrentResult) -> tuple[Plot, ...]:
    """Signal against exposure, the distribution over pixels, and the law of temperature."""
    regions, more = drawn_regions(result.regions)
    return (
        _rise(regions, more),
        *_spread([one for one in regions if one[1].counts.sum()], more),
        *_law([one for one in regions if one[1].law is not None], more),
    )


def _rise(regions: list[tuple[int, RegionDarkCurrent]], more: str) -> Plot:
    series: list[Series] = []
    for colour, one in regions:
        rise = one.groups[one.stated].mean
        series.append(
            Series(
                label=one.scope,
                x=rise.exposure,
                y=rise.value,
                y_error=rise.standard_error,
                colour=colour,
            )
        )
        span = np.array([0.0, rise.exposure.max()])
        series.append(
            Series(label="", x=span, y=rise.offset + rise.slope * span, draw="line", colour=colour)
        )
    return Plot(
        key="dark-current",
        title="Dark signal",
        caption="Mean dark signal against exposure; the slope is the dark current. Look for points"
        f" off the line (light leak, drifting temperature) and for a large offset at 0 s.{more}",
        alt="Mean dark signal against exposure with a straight line.",
        x=Axis(label="exposure [s]", low=0.0),
        y=Axis(label="dark signal [DN]"),
        series=tuple(series),
    )


def _spread(regions: list[tuple[int, RegionDarkCurrent]], more: str) -> tuple[Plot, ...]:
    """The bulk of the pixels with its normal curve, and how many pixels lie above each current."""
    if not regions:
        return ()
    near: list[Series] = []
    far: list[Series] = []
    tails = []
    for colour, one in regions:
        total = int(one.counts.sum())
        median, deviation = bulk(one.edges, one.counts)
        edges, counts = one.edges[: BULK_BINS + 1], one.counts[:BULK_BINS]
        near.append(Series(label=one.scope, x=edges, y=counts, draw="steps", colour=colour))
        expected = total * np.diff(norm.cdf(edges, median, deviation))
        near.append(_dashes((edges[1:] + edges[:-1]) / 2, expected, colour))
        above = total - np.cumsum(one.counts)
        far.append(
            Series(
                label=one.scope,
                x=one.edges[1:],
                y=np.where(above > 0, above, np.nan),
                draw="line",
                colour=colour,
            )
        )
        far.append(_dashes(edges, total * norm.sf(edges, median, deviation), colour))
        beyond = np.interp(median + TAIL * deviation, one.edges[1:], above)
        tails.append(f"{one.scope} {beyond:.0f} of {total}")
    found = f"Beyond {TAIL:g} of its standard deviations lie {listed(tails)}."
    axis = Axis(label="dark current [electron/s]")
    return (
        Plot(
            key="dark-distribution",
            title="Dark current of most pixels",
            caption="Histogram over pixels; the dashes are a normal curve through its bulk. Look"
            " for a second hump (glow, two kinds of pixels) and for a shoulder at its right."
            f"{more}",
            alt="Histogram of dark current about its median, with a normal curve.",
            x=axis,
            y=Axis(label="pixels", log=True),
            series=tuple(near),
        ),
        Plot(
            key="dark-tail",
            title="Warm and hot pixels",
            caption="How many pixels lie above each dark current; the dashes are the bulk alone."
            f" Look for a step (a population of its own) in the tail. {found}{more}",
            alt=f"Number of pixels above each dark current. {found}",
            x=replace(axis, log=True),
            y=Axis(label="pixels above", log=True),
            series=tuple(far),
        ),
    )


def _dashes(x: NDArray[np.float64], y: NDArray[np.float64], colour: int) -> Series:
    """The bulk's curve, where it is worth drawing."""
    shown = np.where(y > LEAST_SHOWN, y, np.nan)
    return Series(label="", x=x, y=shown, draw="dashes", colour=colour)


def bulk(edges: NDArray[np.float64], counts: NDArray[np.int64]) -> tuple[float, float]:
    """Median and standard deviation of a histogram's bulk, the latter from its quartile width.

    Within a bin pixels are taken to lie evenly.
    """
    below = np.concatenate(([0.0], np.cumsum(counts))) / counts.sum()
    # Where no pixel lies the distribution is flat; interpolation needs it to rise.
    rising = below + np.arange(below.size) * 1e-12
    lower, median, upper = np.interp((0.1587, 0.5, 0.8413), rising, edges)
    return float(median), max(float(upper - lower) / 2, float(np.diff(edges).min()) / 4)


def _law(regions: list[tuple[int, RegionDarkCurrent]], more: str) -> tuple[Plot, ...]:
    if not regions:
        return ()
    series: list[Series] = []
    told = []
    for colour, one in regions:
        law = one.law
        assert law is not None
        order = np.argsort(law.temperature)
        x = law.temperature[order]
        series.append(Series(label=one.scope, x=x, y=np.exp(law.logarithm[order]), colour=colour))
        series.append(
            Series(label="", x=x, y=np.exp(law.fitted[order]), draw="line", colour=colour)
        )
        told.append(
            f"{one.scope} doubles every {doubt_text(law.doubling, law.doubling_error, 'K')} at"
            f" {number_text(law.at)} °C"
        )
    return (
        Plot(
            key="dark-temperature",
            title="Dark current and temperature",
            caption=f"The dots are temperatures measured, the line the law fitted: {listed(told)}."
            f" Look for a point that leaves the line: glow, or a wrong thermometer.{more}",
            alt=f"Dark current against temperature. {listed(told)}.",
            x=Axis(label="temperature [°C]"),
            y=Axis(label="dark current [DN/s]", log=True),
            series=tuple(series),
        ),
    )


def dark_uniformity_plots(result: DarkUniformityResult) -> tuple[Plot, ...]:
    """Means of rows and of columns of the dark, the smooth shading taken out."""
    regions, more = drawn_regions(result.regions)
    return profile_plots(
        [(one.scope, one.noise.row_profile, one.noise.column_profile) for _, one in regions],
        key="dark",
        title="Dark signal",
        unit="DN",
        factor=1.0,
        caption="Look for single spikes (hot columns) and for steps between blocks." + more,
    )
