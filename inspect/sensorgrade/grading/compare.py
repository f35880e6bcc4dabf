"""The same devices before and after: what changed, and whether it is more than the doubt."""

from collections.abc import Sequence
from dataclasses import dataclass
from math import hypot, sqrt

import numpy as np
from numpy.typing import NDArray

from sensorgrade.grading.conformity import normal_probability
from sensorgrade.grading.held import DeviceReadings
from sensorgrade.measurement import Measurement

FALSE_ALARM = 0.05  # chance that anything is called a change when nothing changed


@dataclass(frozen=True, slots=True)
class Change:
    """One number of one device, before and after.

    ``deviation`` is the difference over its standard uncertainty, None where that is 0;
    ``significant`` when chance alone would show any such change among all that were compared in
    fewer than one comparison of two runs in twenty.
    """

    serial: str
    name: str
    scope: str
    unit: str
    before: float
    after: float
    difference: float
    standard_uncertainty: float
    deviation: float | None
    significant: bool


@dataclass(frozen=True, slots=True)
class Agreement:
    """How one measurement agrees between two runs, over devices and places.

    ``bias`` is the mean difference (after - before) with its ``bias_uncertainty`` from the
    scatter; ``low`` and ``high`` are the limits that hold 95 % of differences [1]; ``deviation``
    is the root mean square of the differences over their stated uncertainties: 1 where those
    explain the differences, None where they are 0.

    References
    ----------
    .. [1] J. M. Bland, D. G. Altman, Lancet 327 (1986) 307.
    """

    name: str
    unit: str
    pairs: int
    bias: float
    bias_uncertainty: float
    low: float
    high: float
    deviation: float | None


@dataclass(frozen=True, slots=True)
class Comparison:
    """Changes with the most significant first, agreement by name, devices in one run only."""

    changes: tuple[Change, ...]
    agreements: tuple[Agreement, ...]
    only_before: tuple[str, ...]
    only_after: tuple[str, ...]


def comparison(before: Sequence[DeviceReadings], after: Sequence[DeviceReadings]) -> Comparison:
    """Compare two runs of the same devices, matched by serial.

    Parameters
    ----------
    before, after : sequences of DeviceReadings
        A serial stands once in each. Counts of defects are compared as expected numbers.

    Notes
    -----
    The difference of two readings has the standard uncertainty sqrt(u1² + u2²). What both runs
    share (the same lamp, the same calibration) cancels in truth, so this never calls too much a
    change. With m numbers compared, each is tested at 1 - (1 - 0.05)^(1/m), two-sided.
    """
    first = {device.serial: _numbers(device) for device in before}
    second = {device.serial: _numbers(device) for device in after}
    pairs = [
        (serial, one, second[serial][key])
        for serial in first
        if serial in second
        for key, one in first[serial].items()
        if key in second[serial]
    ]
    least = 1.0 - (1.0 - FALSE_ALARM) ** (1.0 / max(1, len(pairs)))
    changes = [_change(serial, one, two, least) for serial, one, two in pairs]
    changes.sort(
        key=lambda change: (
            -(abs(change.deviation) if change.deviation is not None else change.significant * 1e9)
        )
    )
    names = dict.fromkeys(one.name for _, one, _ in pairs)
    return Comparison(
        changes=tuple(changes),
        agreements=tuple(
            agreement
            for name in names
            for agreement in _agreement([change for change in changes if change.name == name])
        ),
        only_before=tuple(serial for serial in first if serial not in second),
        only_after=tuple(serial for serial in second if serial not in first),
    )


@dataclass(frozen=True, slots=True)
class DefectChange:
    """What became of a device's defects; row numbers of the two tables.

    ``kept`` pairs a row before with a row after. ``doubtful_new`` and ``doubtful_gone`` are those
    of ``new`` and ``gone`` that lie so near their threshold that noise may have made the change.
    """

    kept: tuple[tuple[int, int], ...]
    new: tuple[int, ...]
    gone: tuple[int, ...]
    doubtful_new: tuple[int, ...]
    doubtful_gone: tuple[int, ...]


def defect_change(
    before: NDArray[np.void], after: NDArray[np.void], *, reach: int = 0, sure: float = 0.95
) -> DefectChange:
    """Match two defect tables of one device by kind and position.

    Parameters
    ----------
    before, after : DEFECT arrays
    reach : int
        Pixels by which positions may differ, for devices mounted again between two benches that
        crop frames differently.
    sure : float
        A defect whose probability is below this is doubtful.

    Notes
    -----
    Two defects of one kind are the same when their bounding boxes, widened by ``reach``, share a
    pixel. Each is matched once, the pair with the largest common area first, so that a cluster
    that fell in two is one kept and one new.
    """
    candidates = []
    for one, old in enumerate(before):
        same = after["kind"] == old["kind"]
        rows = _overlap(old, after, "row", reach)
        columns = _overlap(old, after, "column", reach)
        area = np.where(same, rows * columns, 0)
        candidates += [(-int(area[two]), one, int(two)) for two in np.flatnonzero(area > 0)]
    kept: dict[int, int] = {}
    taken: set[int] = set()
    for _, one, two in sorted(candidates):
        if one not in kept and two not in taken:
            kept[one] = two
            taken.add(two)
    new = tuple(two for two in range(len(after)) if two not in taken)
    gone = tuple(one for one in range(len(before)) if one not in kept)
    return DefectChange(
        kept=tuple(sorted(kept.items())),
        new=new,
        gone=gone,
        doubtful_new=tuple(two for two in new if after["probability"][two] < sure),
        doubtful_gone=tuple(one for one in gone if before["probability"][one] < sure),
    )


def _overlap(old: np.void, after: NDArray[np.void], axis: str, reach: int) -> NDArray[np.int64]:
    """Pixels that a defect's extent, widened, shares with each of others along one axis."""
    start = np.maximum(old[f"{axis}_start"] - reach, after[f"{axis}_start"].astype(np.int64))
    stop = np.minimum(old[f"{axis}_stop"] + reach, after[f"{axis}_stop"].astype(np.int64))
    shared: NDArray[np.int64] = np.maximum(stop - start, 0)
    return shared


def _numbers(device: DeviceReadings) -> dict[tuple[str, str], Measurement]:
    """Everything a device was read for, by name and scope; counts as measurements."""
    counts = [
        Measurement(
            count.kind, count.scope, count.expected, count.standard_uncertainty, "", count.found
        )
        for count in device.counts
    ]
    return {(one.name, one.scope): one for one in (*device.measurements, *counts)}


def _change(serial: str, one: Measurement, two: Measurement, least: float) -> Change:
    difference = two.value - one.value
    doubt = hypot(one.standard_uncertainty, two.standard_uncertainty)
    deviation = difference / doubt if doubt > 0.0 else None
    chance = float(difference == 0.0)
    if deviation is not None:
        chance = 2.0 * normal_probability(-abs(deviation))
    return Change(
        serial=serial,
        name=one.name,
        scope=one.scope,
        unit=one.unit,
        before=one.value,
        after=two.value,
        difference=difference,
        standard_uncertainty=doubt,
        deviation=deviation,
        significant=chance < least,
    )


def _agreement(changes: list[Change]) -> tuple[Agreement, ...]:
    """Agreement over the places and devices of one measurement, where there are two or more."""
    if len(changes) < 2:
        return ()
    differences = np.array([change.difference for change in changes])
    bias, spread = float(differences.mean()), float(differences.std(ddof=1))
    deviations = [change.deviation for change in changes if change.deviation is not None]
    return (
        Agreement(
            name=changes[0].name,
            unit=changes[0].unit,
            pairs=len(changes),
            bias=bias,
            bias_uncertainty=spread / sqrt(len(changes)),
            low=bias - 1.96 * spread,
            high=bias + 1.96 * spread,
            deviation=sqrt(float(np.mean(np.square(deviations)))) if deviations else None,
        ),
    )
