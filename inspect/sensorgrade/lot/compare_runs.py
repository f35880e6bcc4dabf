"""Two runs of the same devices beside each other, or several as a study of the benches."""

from collections.abc import Sequence
from dataclasses import dataclass
from math import sqrt
from pathlib import Path

import numpy as np
from astropy.table import Table
from numpy.typing import NDArray

from sensorgrade.defects.defect import DEFECT
from sensorgrade.errors import NotMeasured, RequestError
from sensorgrade.grading.compare import Comparison, DefectChange, comparison, defect_change
from sensorgrade.grading.held import DeviceReadings
from sensorgrade.grading.repeatability import (
    Repeatability,
    repeatability,
    share_of_tolerance,
)
from sensorgrade.lot.stored import StoredLot, stored_lot
from sensorgrade.recipe.model import Limit, Recipe

DEFECT_TABLE = "defects.ecsv"


@dataclass(frozen=True, slots=True)
class DefectsCompared:
    """One device's defect tables, DEFECT arrays, and how they match."""

    serial: str
    before: NDArray[np.void]
    after: NDArray[np.void]
    change: DefectChange


@dataclass(frozen=True, slots=True)
class RunsCompared:
    """Changes of numbers, and of defects for each device whose tables both runs have.

    ``regraded`` holds serial, grade or decision before, and after, where they differ.
    """

    numbers: Comparison
    defects: tuple[DefectsCompared, ...]
    regraded: tuple[tuple[str, str, str], ...]


def compare_runs(before: Path, after: Path, *, reach: int = 0) -> RunsCompared:
    """Compare the devices that two runs have in common, matched by serial.

    ``reach`` is by how many pixels a defect may have moved.

    Raises
    ------
    RequestError
        A folder holds no ledger, or the runs have no device in common.
    """
    first, second = stored_lot(before), stored_lot(after)
    numbers = comparison(_latest(first), _latest(second))
    old = {device.serial: at for at, device in enumerate(first.devices)}
    new = {device.serial: at for at, device in enumerate(second.devices)}
    common = [serial for serial in old if serial in new]
    if not common:
        raise RequestError(
            f"{before} and {after}: no device in common; serials are what must match"
        )
    defects, regraded = [], []
    for serial in common:
        one, two = old[serial], new[serial]
        tables = [path / DEFECT_TABLE for path in (first.folders[one], second.folders[two])]
        if all(path.is_file() for path in tables):
            earlier, later = (defect_table(path) for path in tables)
            change = defect_change(earlier, later, reach=reach)
            defects.append(DefectsCompared(serial, earlier, later, change))
        was = first.grades[one] or first.decisions[one]
        is_now = second.grades[two] or second.decisions[two]
        if was != is_now:
            regraded.append((serial, was, is_now))
    return RunsCompared(numbers, tuple(defects), tuple(regraded))


def defect_table(path: Path) -> NDArray[np.void]:
    """The defects of a device as a DEFECT array.

    Raises
    ------
    RequestError
        The table lacks a column.
    """
    table = Table.read(path, format="ascii.ecsv")
    missing = [name for name in DEFECT.names or () if name not in table.colnames]
    if missing:
        raise RequestError(f"{path}: no column {', '.join(missing)}; inspect the device again")
    defects = np.zeros(len(table), DEFECT)
    for name in DEFECT.names or ():
        defects[name] = np.asarray(table[name].filled() if table.masked else table[name])
    return defects


@dataclass(frozen=True, slots=True)
class BenchStudy:
    """Repeatability of one measurement at one place, over the devices that all runs have.

    ``shares`` maps each limit on it to the share of the tolerance that the bench takes up [%].
    """

    name: str
    scope: str
    unit: str
    devices: int
    mean: float
    study: Repeatability
    shares: tuple[tuple[Limit, float], ...]


def bench_study(
    runs: Sequence[tuple[str, Path]], *, recipe: Recipe | None = None
) -> tuple[BenchStudy, ...]:
    """Study benches by the same devices inspected in several runs.

    Parameters
    ----------
    runs : sequence of (bench, folder)
        Each bench equally often; one bench is enough.
    recipe : Recipe, optional
        Whose limits the bench's scatter is held against.

    Raises
    ------
    RequestError
        The runs do not allow a study: too few devices in common, or benches not equally often.
    """
    stored = [(bench, _latest(stored_lot(folder))) for bench, folder in runs]
    common = set.intersection(*({device.serial for device in lot} for _, lot in stored))
    readings: dict[tuple[str, str, str], dict[str, dict[str, list[tuple[float, float]]]]] = {}
    for bench, lot in stored:
        for device in lot:
            if device.serial not in common:
                continue
            for one in device.measurements:
                of_place = readings.setdefault((one.name, one.scope, one.unit), {})
                of_device = of_place.setdefault(device.serial, {})
                of_device.setdefault(bench, []).append((one.value, one.standard_uncertainty))
    studies, refused = [], ""
    for (name, scope, unit), of_place in readings.items():
        try:
            studies.append(_study(name, scope, unit, of_place, len(runs), recipe))
        except NotMeasured as reason:
            refused = refused or str(reason)
    if not studies:
        raise RequestError(refused or "the runs have no measurement of a device in common")
    return tuple(studies)


def _study(
    name: str,
    scope: str,
    unit: str,
    of_place: dict[str, dict[str, list[tuple[float, float]]]],
    runs: int,
    recipe: Recipe | None,
) -> BenchStudy:
    """One measurement at one place, of the devices that every run measured."""
    whole = {
        serial: of_device
        for serial, of_device in of_place.items()
        if sum(len(values) for values in of_device.values()) == runs
    }
    pairs = [pair for of in whole.values() for values in of.values() for pair in values]
    if not pairs:
        raise NotMeasured(f"{name} of {scope} was not measured of any device by every run")
    stated = sqrt(sum(doubt**2 for _, doubt in pairs) / len(pairs))
    mean = sum(value for value, _ in pairs) / len(pairs)
    found = repeatability(
        {
            serial: {bench: [value for value, _ in values] for bench, values in of.items()}
            for serial, of in whole.items()
        },
        stated=stated,
    )
    limits = () if recipe is None else _limits(recipe, name)
    return BenchStudy(
        name=name,
        scope=scope,
        unit=unit,
        devices=len(whole),
        mean=mean,
        study=found,
        shares=tuple((limit, _share(limit, found.together, mean)) for limit in limits),
    )


def _limits(recipe: Recipe, name: str) -> tuple[Limit, ...]:
    """Limits on a measurement, the best grade that has any."""
    for level in recipe.grades:
        found = tuple(limit for limit in level.limits if limit.name == name)
        if found:
            return found
    return ()


def _share(limit: Limit, spread: float, mean: float) -> float:
    if limit.relation == "<=":
        return share_of_tolerance(spread, mean=mean, upper=limit.bound)
    return share_of_tolerance(spread, mean=mean, lower=limit.bound)


def _latest(lot: StoredLot) -> list[DeviceReadings]:
    """Each serial once: the last one the ledger has."""
    return list({device.serial: device for device in lot.devices}.values())
