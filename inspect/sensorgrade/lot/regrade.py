"""Stored devices held against other limits, in seconds and without any frame."""

import re
from dataclasses import dataclass
from pathlib import Path

from sensorgrade.errors import RequestError
from sensorgrade.grading.decision import Graded
from sensorgrade.grading.grade import grade
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
    concessions,
    costs,
    tightest,
)
from sensorgrade.lot.stored import StoredLot, stored_lot
from sensorgrade.recipe.load import parse_recipe
from sensorgrade.recipe.model import Recipe
from sensorgrade.recipe.vocabulary import Vocabulary

# Parts of a recipe that judge; the others say how devices were measured and cannot change now.
JUDGING = ("grades", "decision", "lot")
TOP_KEY = re.compile(r"^([A-Za-z_][\w-]*)\s*:", re.MULTILINE)


@dataclass(frozen=True, slots=True)
class Regraded:
    """The lot graded again; ``stored`` has each device's grade and decision from the run."""

    recipe: Recipe
    stored: StoredLot
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


def regrade(folder: Path, *, limits: Path, vocabulary: Vocabulary) -> Regraded:
    """Grade the devices of a run's ledger against the limits in a file.

    Parameters
    ----------
    folder : Path
        Where the run wrote to.
    limits : Path
        A whole recipe, or only its ``grades``, ``decision`` and ``lot``; what it leaves out is
        as in the run's recipe.

    Raises
    ------
    RequestError, RecipeError
        No ledger, an unreadable file, or mistakes in it, one line each.
    """
    recipe = limits_recipe(limits, stored_lot(folder, names=()).recipe_text, vocabulary)
    names = {limit.name for level in recipe.grades for limit in level.limits}
    stored = stored_lot(folder, names=names | {TEMPERATURE, ENERGY})
    graded = tuple(
        grade(device.measurements, device.counts, device.findings, recipe=recipe)
        for device in stored.devices
    )
    serials = [device.serial for device in stored.devices]
    return Regraded(
        recipe=recipe,
        stored=stored,
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


def limits_recipe(file: Path, run_text: str, vocabulary: Vocabulary) -> Recipe:
    """The recipe of a run with what ``file`` states in place of its own.

    A file with ``sensor`` is a recipe of its own. Any other holds only what judges; the run's
    other parts are put behind it, so that lines in messages are those of the file.

    Raises
    ------
    RequestError, RecipeError
        The file cannot be read, holds parts that only new frames could answer, or has mistakes.
    """
    try:
        text = file.read_text(encoding="utf-8")
    except (OSError, UnicodeDecodeError) as error:
        raise RequestError(f"{file}: cannot be read as text ({error}); expected limits") from error
    stated = TOP_KEY.findall(text)
    if "sensor" not in stated:
        beyond = [name for name in stated if name not in (*JUDGING, "name")]
        if beyond:
            raise RequestError(
                f"{file}: {', '.join(beyond)} cannot change without new frames; expected"
                f" {', '.join(JUDGING)}, or a whole recipe"
            )
        text = "\n".join([text, *_other_parts(run_text, stated)])
    return parse_recipe(text, vocabulary, path=str(file))


def _other_parts(text: str, stated: list[str]) -> list[str]:
    """The top-level parts of a recipe's text whose keys were not stated elsewhere."""
    starts = [(match.start(), match[1]) for match in TOP_KEY.finditer(text)]
    ends = [start for start, _ in starts[1:]] + [len(text)]
    parts = zip(starts, ends, strict=True)
    return [text[start:end] for (start, name), end in parts if name not in stated]
