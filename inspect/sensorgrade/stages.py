"""The stage table: every stage there is, in the order in which they run.

A stage listed here is known to recipes, their schema, limits, grading, ledger and pages. Stages
of one's own come in through the entry point group ``sensorgrade.stages``.
"""

from dataclasses import fields
from importlib.metadata import entry_points

from sensorgrade.defects.clusters import ClusterOptions
from sensorgrade.defects.table import FINDERS
from sensorgrade.defects.thresholds import MOVABLE
from sensorgrade.measure import (
    bias_drift,
    bias_level,
    crosstalk,
    dark_current,
    dark_uniformity,
    extended_pixel_edge,
    lag,
    linearity,
    photon_transfer,
    pickup,
    pocket_pumping,
    read_noise,
    response_uniformity,
    saturation,
    temporal_noise,
    x_ray,
)
from sensorgrade.measure.stage import Stage
from sensorgrade.recipe.vocabulary import Vocabulary

ENTRY_POINTS = "sensorgrade.stages"

MEASURING: tuple[Stage, ...] = (
    bias_level.STAGE,
    photon_transfer.STAGE,
    x_ray.STAGE,
    read_noise.STAGE,
    bias_drift.STAGE,
    temporal_noise.STAGE,
    pickup.STAGE,
    saturation.STAGE,
    linearity.STAGE,
    dark_current.STAGE,
    dark_uniformity.STAGE,
    response_uniformity.STAGE,
    extended_pixel_edge.STAGE,
    pocket_pumping.STAGE,
    lag.STAGE,
    crosstalk.STAGE,
)

# What inspections keep enough for to count again without frames.
THRESHOLDS = {
    "pixels": tuple(kind for kinds in MOVABLE.values() for kind in kinds),
    "clusters": tuple(field.name for field in fields(ClusterOptions)),
}


def measuring_stages() -> tuple[Stage, ...]:
    """The stages of this table, then those that other packages bring, by name."""
    found = entry_points(group=ENTRY_POINTS)
    return MEASURING + tuple(point.load() for point in sorted(found, key=lambda one: one.name))


def vocabulary() -> Vocabulary:
    """What recipes may name, gathered from the stages."""
    measuring = measuring_stages()
    quantities = [quantity for stage in measuring for quantity in stage.measures]
    sources: dict[str, tuple[str, ...]] = {}
    for stage in measuring:
        for quantity in stage.measures:
            sources[quantity.name] = (*sources.get(quantity.name, ()), stage.name)
    for finder in FINDERS:
        for count in finder.counts:
            sources[count.name] = (*sources.get(count.name, ()), finder.name)
    return Vocabulary(
        stages={stage.name: stage.options for stage in measuring}
        | {finder.name: finder.options for finder in FINDERS},
        quantities={quantity.name: quantity.unit for quantity in quantities},
        meanings={quantity.name: quantity.meaning for quantity in quantities}
        | {count.name: count.meaning for finder in FINDERS for count in finder.counts},
        counts=tuple(dict.fromkeys(count.name for finder in FINDERS for count in finder.counts)),
        sources=sources,
        thresholds=THRESHOLDS,
    )
