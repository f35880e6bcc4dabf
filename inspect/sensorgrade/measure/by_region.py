"""One measurement made for every region: those that cannot be made become findings."""

from collections.abc import Callable, Sequence
from typing import TypeVar

from sensorgrade.errors import NotMeasured
from sensorgrade.frames.geometry import Region
from sensorgrade.measure.stage import Inputs
from sensorgrade.measurement import Finding

Found = TypeVar("Found")


def by_region(
    inputs: Inputs,
    measure: Callable[[Region], Found],
    *,
    stage: str,
    undecides: Sequence[str],
) -> tuple[tuple[Found, ...], tuple[Finding, ...]]:
    """``measure(region)`` of every region, and a finding for each where it was impossible.

    Parameters
    ----------
    measure : callable
        Raises NotMeasured with a sentence when the region's frames do not allow it.
    stage : str
        Name of the stage, for the findings.
    undecides : sequence of str
        Measurements that are missing where it was impossible.

    Raises
    ------
    NotMeasured
        No region allowed it; the sentence is that of the first.
    """
    found: list[Found] = []
    refused: list[tuple[Region, NotMeasured]] = []
    for region in inputs.reduced.geometry.regions:
        try:
            found.append(measure(region))
        except NotMeasured as reason:
            refused.append((region, reason))
    if not found:
        raise refused[0][1]
    findings = tuple(
        Finding(
            severity="warning",
            where=f"{stage}, {region.scope}",
            seen=str(reason),
            remedy="take the frames that are missing, or grade without this region",
            undecides=tuple(undecides),
        )
        for region, reason in refused
    )
    return tuple(found), findings
