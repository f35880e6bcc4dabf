"""The plots of a device: which stage gives which, in the order of the page; and their drawing."""

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

from markupsafe import Markup

from sensorgrade.masters.master import Masters
from sensorgrade.measure.stage import StageResult
from sensorgrade.report.plot import Plot
from sensorgrade.report.svg import svg

# stage: what draws its result
DRAWN_BY: dict[str, Callable[[Any], tuple[Plot, ...]]] = {}


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


def plots(*, masters: Masters, stages: Mapping[str, StageResult]) -> tuple[Plot, ...]:
    """Plots of the stages that ran and have curves, then distributions of the masters."""
    return tuple(
        plot
        for name, result in stages.items()
        if name in DRAWN_BY
        for plot in DRAWN_BY[name](result)
    )
