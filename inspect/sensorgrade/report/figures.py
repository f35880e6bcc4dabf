"""The plots of a device: which stage gives which, in the order of the page; and their drawing."""

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

from markupsafe import Markup

from sensorgrade.measure.stage import StageResult
from sensorgrade.report.dark_plots import dark_current_plots, dark_uniformity_plots
from sensorgrade.report.noise_plots import (
    bias_drift_plots,
    photon_transfer_plots,
    pickup_plots,
    temporal_noise_plots,
)
from sensorgrade.report.plot import Plot
from sensorgrade.report.response_plots import (
    linearity_plots,
    response_uniformity_plots,
    saturation_plots,
)
from sensorgrade.report.svg import svg
from sensorgrade.report.transfer_plots import charge_transfer_plots, x_ray_plots
from sensorgrade.report.trap_plots import pocket_pumping_plots

# stage: what draws its result, in the order of the page
DRAWN_BY: dict[str, Callable[[Any], tuple[Plot, ...]]] = {
    "photon_transfer": photon_transfer_plots,
    "saturation": saturation_plots,
    "linearity": linearity_plots,
    "dark_current": dark_current_plots,
    "temporal_noise": temporal_noise_plots,
    "pickup": pickup_plots,
    "charge_transfer": charge_transfer_plots,
    "x_ray": x_ray_plots,
    "pocket_pumping": pocket_pumping_plots,
    "response_uniformity": response_uniformity_plots,
    "dark_uniformity": dark_uniformity_plots,
    "bias_drift": bias_drift_plots,
}


@dataclass(frozen=True, slots=True)
class Figure:
    """A drawn plot with its words."""

    key: str
    title: str
    drawing: Markup
    caption: str


def figure(plot: Plot) -> Figure:
    """The plot drawn for a page."""
    return Figure(plot.key, plot.title, Markup(svg(plot)), plot.caption)


def plots(stages: Mapping[str, StageResult]) -> tuple[Plot, ...]:
    """Plots of the stages that ran and have curves."""
    return tuple(
        plot for name, draw in DRAWN_BY.items() if name in stages for plot in draw(stages[name])
    )
