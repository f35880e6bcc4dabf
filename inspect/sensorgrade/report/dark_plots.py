"""Plots of the stages that look at darks: dark current, its spread, its law, its uniformity."""

import numpy as np
from numpy.typing import NDArray

from sensorgrade.measure.dark_current import DarkCurrentResult, RegionDarkCurrent
from sensorgrade.measure.dark_uniformity import DarkUniformityResult
from sensorgrade.report.noise_plots import drawn_regions, listed
from sensorgrade.report.plot import Axis, Plot, Series
from sensorgrade.report.response_plots import profile_plots
from sensorgrade.wording import doubt_text, number_text

LEAST_SHOWN = 0.3  # pixels in a bin, below which the bulk's curve is not drawn


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
    """Histogram over pixels with the normal curve of its bulk: what lies beyond is the tail."""
    if not regions:
        return ()
    series: list[Series] = []
    tails = []
    for colour, one in regions:
        series.append(
            Series(label=one.scope, x=one.edges, y=one.counts, draw="steps", colour=colour)
        )
        centre, curve, beyond = bulk(one.edges, one.counts)
        series.append(
            Series(
                label="",
                x=centre,
                y=np.where(curve > LEAST_SHOWN, curve, np.nan),
                draw="dashes",
                colour=colour,
            )
        )
        tails.append(f"{one.scope} {beyond} of {int(one.counts.sum())}")
    return (
        Plot(
            key="dark-distribution",
            title="Dark current over pixels",
            caption="Histogram over pixels; the dashes are a normal curve through its bulk. The"
            " pixels to the right of it are the warm and hot ones: beyond 5 of its standard"
            f" deviations lie {listed(tails)}.{more}",
            alt=f"Histogram of dark current. In the tail: {listed(tails)}.",
            x=Axis(label="dark current [electron/s]"),
            y=Axis(label="pixels", log=True),
            series=tuple(series),
        ),
    )


def bulk(
    edges: NDArray[np.float64], counts: NDArray[np.int64]
) -> tuple[NDArray[np.float64], NDArray[np.float64], int]:
    """Centres of the bins, a normal curve there by median and quartile width, pixels above 5 sd.

    Within a bin pixels are taken to lie evenly.
    """
    total = int(counts.sum())
    below = np.concatenate(([0.0], np.cumsum(counts))) / total
    # Where no pixel lies the distribution is flat; interpolation needs it to rise.
    rising = below + np.arange(below.size) * 1e-12
    lower, median, upper = np.interp((0.1587, 0.5, 0.8413), rising, edges)
    deviation = max((upper - lower) / 2, float(np.diff(edges).min()) / 4)
    centre = (edges[1:] + edges[:-1]) / 2
    curve = (
        total
        * np.diff(edges)
        / (deviation * np.sqrt(2 * np.pi))
        * np.exp(-0.5 * ((centre - median) / deviation) ** 2)
    )
    return centre, curve, int(counts[centre > median + 5 * deviation].sum())


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
