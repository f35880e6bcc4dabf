"""Stored devices held against other limits, in seconds and without any frame."""

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

from sensorgrade.errors import RequestError
from sensorgrade.grading.decision import Graded
from sensorgrade.grading.grade import grade_known
from sensorgrade.grading.held import DeviceReadings
from sensorgrade.grading.lot_statistics import (
    GradeYield,
    LimitStatistics,
    LotDecision,
    limit_statistics,
    lot_decision,
    yields,
)
from sensorgrade.grading.temperature import ENERGY, TEMPERATURE
from sensorgrade.grading.what_if import (
    Concessions,
    Cost,
    Tightest,
    YieldCurve,
    YieldGrid,
    concessions,
    costs,
    tightest,
    worth_showing,
    yield_curve,
    yield_grid,
)
from sensorgrade.lot.collector import collector_rests
from sensorgrade.lot.recounting import moved_thresholds, with_counts_at
from sensorgrade.lot.stored import StoredLot, last_recipe, stored_lot
from sensorgrade.recipe.load import load_limits, parse_recipe
from sensorgrade.recipe.model import Recipe
from sensorgrade.recipe.vocabulary import Vocabulary


@dataclass(frozen=True, slots=True)
class Regraded:
    """The lot graded again; ``stored`` has each device's grade and decision from the run.

    ``devices`` are what was graded: the run's readings, with the counts of pixels at the thresholds
    named in ``moved``.
    """

    recipe: Recipe
    stored: StoredLot
    moved: tuple[str, ...]
    devices: tuple[DeviceReadings, ...]
    graded: tuple[Graded, ...]
    yields: tuple[GradeYield, ...]
    lot: LotDecision | None

    @property
    def changed(self) -> tuple[int, ...]:
        """Places of the devices whose grade or decision is no longer the run's."""
        return tuple(
            at
            for at, (now, before, decision) in enumerate(
                zip(self.graded, self.stored.grades, self.stored.decisions, strict=True)
            )
            if (now.grade, now.decision) != (before, decision)
        )


@collector_rests()
def regrade(folder: Path, *, limits: Path, vocabulary: Vocabulary) -> Regraded:
    """Grade the devices of a run's ledger against the limits in a file, no frame read.

    Thresholds of pixels and the joining of clusters may differ from the run's: counts are then made
    again from the pixels that inspections keep.

    Parameters
    ----------
    folder : Path
        Where the run wrote to.
    limits : Path
        A whole recipe, or only its ``grades``, ``decision``, ``lot`` and thresholds under
        ``stages``; what it leaves out is as in the run's recipe.

    Raises
    ------
    RequestError, RecipeError
        No ledger, an unreadable file, or mistakes in it, one line each.
    """
    path, text = last_recipe(folder)
    inspected = parse_recipe(text, vocabulary, path=path)
    recipe = load_limits(limits, vocabulary, recipe=inspected)
    moved = moved_thresholds(inspected.stages, recipe.stages)
    names = {limit.name for level in recipe.grades for limit in level.limits}
    stored = stored_lot(
        folder, names=names | {TEMPERATURE, ENERGY, "hot_pixels"}, with_candidates=bool(moved)
    )
    devices = stored.devices
    if moved:
        devices = with_counts_at(stored, recipe=recipe, moved=moved, names=names)
    graded = tuple(
        grade_known(device.known, recipe=recipe, with_accepted=False) for device in devices
    )
    serials = [device.serial for device in stored.devices]
    return Regraded(
        recipe=recipe,
        stored=stored,
        moved=moved,
        devices=devices,
        graded=graded,
        yields=yields(graded, recipe=recipe),
        lot=lot_decision(serials, graded, plan=recipe.lot),
    )


@dataclass(frozen=True, slots=True)
class WhatIf:
    """One grade's limits and what they cost a lot.

    ``concessions`` is None where no number was wanted, or where no easing reaches it.
    """

    grade: str
    tightest: Tightest
    costs: tuple[Cost, ...]
    statistics: tuple[LimitStatistics, ...]
    concessions: Concessions | None


def yield_against(
    lot: Tightest, names: Sequence[str], *, recipe: Recipe
) -> YieldCurve | YieldGrid | None:
    """Yield against the bounds of one or of two limits, None where none is named.

    Raises
    ------
    RequestError
        The grade has no limit of that name.
    """
    places = []
    for name in names:
        found = [place for place, limit in enumerate(lot.limits) if limit.name == name]
        if not found:
            there = ", ".join(dict.fromkeys(limit.name for limit in lot.limits))
            raise RequestError(f"--vary {name}: no such limit in {recipe.path}; there are {there}")
        # A range is two limits: the one named again is its other side.
        places.append(next((one for one in found if one not in places), found[0]))
    if not places:
        return None
    if len(places) == 1:
        bounds = worth_showing(lot, limit=places[0], steps=12)
        return yield_curve(lot, limit=places[0], bounds=bounds)
    first, second = places
    return yield_grid(
        lot,
        first=first,
        second=second,
        first_bounds=worth_showing(lot, limit=first, steps=8),
        second_bounds=worth_showing(lot, limit=second, steps=6),
    )


@collector_rests()
def what_if(
    devices: tuple[DeviceReadings, ...], *, recipe: Recipe, grade_name: str, wanted: int | None
) -> WhatIf:
    """Costs of one grade's limits, and the concessions that would accept ``wanted`` devices.

    Raises
    ------
    RequestError
        The recipe has no such grade.
    """
    levels = {level.name: level for level in recipe.grades}
    if grade_name not in levels:
        raise RequestError(
            f"no grade {grade_name!r} in {recipe.path}; there are {', '.join(levels)}"
        )
    lot = tightest(devices, level=levels[grade_name], recipe=recipe)
    return WhatIf(
        grade=grade_name,
        tightest=lot,
        costs=costs(lot),
        statistics=tuple(
            one for one in limit_statistics(devices, recipe=recipe) if one.grade == grade_name
        ),
        concessions=None if wanted is None else concessions(lot, wanted=wanted),
    )
