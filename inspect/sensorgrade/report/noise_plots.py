"""Plots of the stages that measure noise: photon transfer, temporal noise, drift, pickup."""

from collections.abc import Iterable, Sequence
from typing import TypeVar

import numpy as np
from numpy.typing import NDArray

from sensorgrade.measure.bias_drift import BiasDriftResult
from sensorgrade.measure.photon_transfer import PhotonTransferResult, RegionTransfer
from sensorgrade.measure.pickup import PickupResult
from sensorgrade.measure.temporal_noise import TemporalNoiseResult
from sensorgrade.report.plot import Axis, Plot, Series
from sensorgrade.wording import number_text

Region = TypeVar("Region")

MOST_REGIONS = 6  # drawn apart, one colour each
MOST_POINTS = 800  # of one curve


def drawn_regions(regions: Sequence[Region]) -> tuple[list[tuple[int, Region]], str]:
    """The regions a plot shows, numbered for their colours, and what it says of the others."""
    shown = list(enumerate(regions))[:MOST_REGIONS]
    left = len(regions) - len(shown)
    return shown, f" {left} more are in the numbers below." if left > 0 else ""


def listed(texts: Iterable[str]) -> str:
    """Texts in one sentence."""
    return "; ".join(texts)


def photon_transfer_plots(result: PhotonTransferResult) -> tuple[Plot, ...]:
    """Variance against signal with the fitted model, and how far the points lie from it."""
    regions, more = drawn_regions(result.regions)
    series: list[Series] = []
    lower: list[Series] = []
    for colour, region in regions:
        curve = region.curve
        series.append(
            Series(
                label=region.scope,
                x=curve.signal,
                y=curve.variance,
                y_error=curve.standard_error,
                colour=colour,
            )
        )
        used = (curve.signal >= region.lower) & (curve.signal <= region.upper)
        series.append(
            Series(
                label="",
                x=curve.signal[used],
                y=region.fitted[used],
                draw="line",
                colour=colour,
            )
        )
        lower.append(_departure(region, used, colour))
    ranges = listed(
        f"{region.scope}: {region.model}, {number_text(region.lower, 3)} to"
        f" {number_text(region.upper, 3)} DN, {region.levels} levels"
        for _, region in regions
    )
    caption = (
        "Variance of pair differences against the mean signal. The line is the model over the"
        f" range fitted ({ranges}). Look for points that leave it early: the gain would then be"
        f" wrong. Below, their distance from it; a bend means that the model lacks a term.{more}"
    )
    return (
        Plot(
            key="photon-transfer",
            title="Photon transfer",
            caption=caption,
            alt=f"Variance against signal, with fit and residuals. {ranges}.",
            x=Axis(label="signal above bias [DN]", log=True),
            y=Axis(label="variance [DN²]", log=True),
            series=tuple(series),
            lower=tuple(lower),
            lower_y=Axis(label="off by [%]"),
        ),
    )


def _departure(region: RegionTransfer, used: NDArray[np.bool_], colour: int) -> Series:
    """Distance of the points used from the model, in % of it."""
    model = region.fitted[used]
    return Series(
        label="",
        x=region.curve.signal[used],
        y=100 * (region.curve.variance[used] - model) / model,
        y_error=100 * region.curve.standard_error[used] / model,
        colour=colour,
    )


def temporal_noise_plots(result: TemporalNoiseResult) -> tuple[Plot, ...]:
    """How the noise of single pixels is distributed."""
    regions, more = drawn_regions([region for region in result.regions if region.counts.size])
    if not regions:
        return ()
    return (
        Plot(
            key="temporal-noise",
            title="Noise of single pixels",
            caption="Standard deviation of each pixel over the bias frames. Look for a tail or a"
            " second hump to the right: noisy and telegraph pixels."
            f" Frames used: {listed(f'{one.scope} {one.frames}' for _, one in regions)}.{more}",
            alt="Histogram of the pixels' noise, logarithmic.",
            x=Axis(label="noise [electron]"),
            y=Axis(label="pixels", log=True),
            series=tuple(
                Series(label=one.scope, x=one.edges, y=one.counts, draw="steps", colour=colour)
                for colour, one in regions
            ),
        ),
    )


def bias_drift_plots(result: BiasDriftResult) -> tuple[Plot, ...]:
    """The level of the bias frame after frame."""
    regions, more = drawn_regions(result.regions)
    timed = all(np.isfinite(region.time).all() for _, region in regions)
    return (
        Plot(
            key="bias-drift",
            title="Bias level over the set",
            caption="Level of each frame less the first one's. Look for a slope (warming up) or a"
            f" step (something was touched).{more}",
            alt="Bias level against time.",
            x=Axis(label="time since the first frame [s]" if timed else "frame"),
            y=Axis(label="level less the first [DN]"),
            series=tuple(
                Series(
                    label=one.scope,
                    x=one.time if timed else np.arange(one.level.size),
                    y=one.level - one.level[0],
                    colour=colour,
                )
                for colour, one in regions
                if one.level.size
            ),
        ),
    )


def pickup_plots(result: PickupResult) -> tuple[Plot, ...]:
    """The spectrum of the noise along rows, with what counts as a line."""
    regions, more = drawn_regions(result.regions)
    series: list[Series] = []
    for colour, one in regions:
        x, y = strongest(one.frequency, one.power)
        series.append(Series(label=one.scope, x=x, y=y, draw="line", colour=colour))
    for _, one in regions[:1]:
        step = max(1, one.frequency.size // MOST_POINTS)
        series.append(
            Series(
                label="threshold",
                x=one.frequency[::step],
                y=one.threshold[::step],
                draw="dashes",
                colour=5,
            )
        )
    lines = [
        f"{one.scope} {number_text(line.frequency)} cycles/pixel, {number_text(line.amplitude, 3)}"
        " DN"
        for _, one in regions
        for line in one.lines[:3]
    ]
    found = f"Found: {listed(lines)}." if lines else "No line was found."
    return (
        Plot(
            key="pickup",
            title="Spectrum along rows",
            caption="Power of the bias frames' noise; white noise is flat. Look for spikes above"
            f" the dashes: pickup from supplies or clocks. {found}{more}",
            alt=f"Spectrum of the noise along rows. {found}",
            x=Axis(label="frequency [cycles/pixel]"),
            y=Axis(label="power [DN²]", log=True),
            series=tuple(series),
        ),
    )


def strongest(
    x: NDArray[np.float64], y: NDArray[np.float64]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """A long spectrum thinned to MOST_POINTS, each the largest of its stretch: no line is lost."""
    step = max(1, -(-x.size // MOST_POINTS))
    if step == 1:
        return x, y
    starts = np.arange(0, x.size, step)
    top = np.array([start + int(np.argmax(y[start : start + step])) for start in starts])
    return x[top], y[top]
