"""The table of finders: every stage that looks for defects, in the order in which they run."""

from sensorgrade.defects import clusters, column_traps, lines, pixels, pumped_traps, telegraph
from sensorgrade.defects.stage import DefectStage

FINDERS: tuple[DefectStage, ...] = (
    lines.STAGE,
    pixels.STAGE,
    telegraph.STAGE,
    column_traps.STAGE,
    pumped_traps.STAGE,
    clusters.STAGE,
)
