"""The table of finders: every stage that looks for defects, in the order in which they run."""

from sensorgrade.defects import clusters, lines, pixels, telegraph
from sensorgrade.defects.stage import DefectStage

FINDERS: tuple[DefectStage, ...] = (
    lines.STAGE,
    pixels.STAGE,
    telegraph.STAGE,
    clusters.STAGE,
)
