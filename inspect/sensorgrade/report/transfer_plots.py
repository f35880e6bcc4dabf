"""Plots of the stages that look at charge on its way: overscan trails and X-ray lines."""

import numpy as np

from sensorgrade.measure.extended_pixel_edge import ChargeTransferResult
from sensorgrade.measure.x_ray import XRayResult
from sensorgrade.report.noise_plots import drawn_regions, listed
from sensorgrade.report.plot import Axis, Plot, Series
from sensorgrade.wording import number_text

LINE_BINS = 120


def charge_transfer_plots(result: ChargeTransferResult) -> tuple[Plot, ...]:
    """Inefficiency against signal, each direction for itself."""
    made = []
    for direction in dict.fromkeys(curve.direction for curve in result.curves):
        curves, more = drawn_regions([one for one in result.curves if one.direction == direction])
        transfers = listed(f"{one.output} {one.transfers} transfers" for _, one in curves)
        made.append(
            Plot(
                key=f"charge-transfer-{direction}",
                title=f"{direction.capitalize()} charge transfer",
                caption="Charge left behind at each transfer, from what flats leave in the overscan"
                f" ({transfers}). Look for a rise at small signals (traps) or near saturation."
                f"{more}",
                alt=f"{direction.capitalize()} charge transfer inefficiency against signal.",
                x=Axis(label="signal before the edge [DN]", log=True),
                y=Axis(label="CTI per transfer [1]"),
                series=tuple(
                    Series(
                        label=f"output {one.output}",
                        x=one.signal,
                        y=one.inefficiency,
                        y_error=one.standard_uncertainty,
                        colour=colour,
                    )
                    for colour, one in curves
                ),
            )
        )
    return tuple(made)


def x_ray_plots(result: XRayResult) -> tuple[Plot, ...]:
    """The spectrum of single events."""
    lines, more = drawn_regions(result.lines)
    peaks = listed(
        f"{one.output} at {number_text(float(one.fit.parameters[0]))} DN, {one.events} events"
        for _, one in lines
    )
    series = []
    for colour, one in lines:
        place = float(one.fit.parameters[0])
        edges = np.linspace(0.7 * place, 1.3 * place, LINE_BINS + 1)
        counts, _ = np.histogram(one.values, edges)
        series.append(
            Series(label=f"output {one.output}", x=edges, y=counts, draw="steps", colour=colour)
        )
    return (
        Plot(
            key="x-ray",
            title="X-ray line",
            caption=f"Signals of single events; the main line stands without transfers {peaks}."
            " Look for a tail to the left (charge lost or shared) and for a second line at its"
            f" right. Sealed sources are for licensed use, by local rules.{more}",
            alt=f"Histogram of X-ray events. {peaks}.",
            x=Axis(label="signal of the event [DN]"),
            y=Axis(label="events", low=0.0),
            series=tuple(series),
        ),
    )
