"""The plots of a device: which stage gives which, in the order of the page."""

from collections.abc import Callable, Mapping
from typing import Any

from sensorgrade.masters.master import Masters
from sensorgrade.measure.stage import StageResult
from sensorgrade.report.plot import Plot

# stage: what draws its result
DRAWN_BY: dict[str, Callable[[Any], tuple[Plot, ...]]] = {}


def figures(*, masters: Masters, stages: Mapping[str, StageResult]) -> tuple[Plot, ...]:
    """Plots of the stages that ran and have curves, then distributions of the masters."""
    return tuple(
        plot
        for name, result in stages.items()
        if name in DRAWN_BY
        for plot in DRAWN_BY[name](result)
    )
