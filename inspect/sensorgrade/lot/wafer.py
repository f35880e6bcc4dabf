"""Where on the wafer devices fail: yield by wafer, radius and reticle position, and clustering."""

from collections import defaultdict
from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass
from math import hypot, sqrt

import numpy as np
from numpy.typing import NDArray

from sensorgrade.errors import RequestError
from sensorgrade.grading.interval import Interval, wilson
from sensorgrade.lot.summary import DeviceLine

RINGS = 4
SHUFFLES = 9999  # so that the smallest probability told is 1 in 10 000
SEED = 1888
BATCH = 10_000_000  # elements of an array of shuffled wafers


@dataclass(frozen=True, slots=True)
class Die:
    """A device with a known place: ``wafer`` carries the lot's name where there are several lots.

    ``accepted`` is False for one rejected, undecided or not inspected.
    """

    serial: str
    wafer: str
    row: int
    column: int
    accepted: bool
    decision: str
    grade: str | None


@dataclass(frozen=True, slots=True)
class PartYield:
    """Accepted dies among all of a part of the wafers, with Wilson's 95 % interval."""

    part: str
    accepted: int
    dies: int
    interval: Interval


@dataclass(frozen=True, slots=True)
class Clustering:
    """Pairs of neighbouring dies that both failed, against what chance would give.

    Neighbours share an edge or a corner. ``expected`` and ``spread`` are the mean and standard
    deviation of ``pairs`` if the failed dies of each wafer were scattered at random over its
    dies; ``probability`` that chance gives as many pairs or more.
    """

    pairs: int
    expected: float
    spread: float
    probability: float


@dataclass(frozen=True, slots=True)
class LotPlaces:
    """All that a lot's wafers say; the reticle's places only where its size is known."""

    dies: tuple[Die, ...]
    wafers: tuple[PartYield, ...]
    rings: tuple[PartYield, ...]
    reticle: tuple[PartYield, ...]
    clustering: Clustering


def lot_places(lines: Iterable[DeviceLine], *, reticle: tuple[int, int] | None = None) -> LotPlaces:
    """The wafers of a lot; ``reticle`` is (rows, columns) of the dies printed at once.

    The first place of the reticle is taken to print the least row and the least column.

    Raises
    ------
    RequestError
        No device has a known place on a wafer.
    """
    placed = dies(lines)
    if not placed:
        raise RequestError(
            "no device of this run has a known place on a wafer; name wafer, die_row and"
            " die_column under frames in the recipe"
        )
    first = min(die.row for die in placed), min(die.column for die in placed)
    return LotPlaces(
        dies=placed,
        wafers=wafer_yields(placed),
        rings=radius_yields(placed),
        reticle=()
        if reticle is None
        else reticle_yields(placed, rows=reticle[0], columns=reticle[1], first=first),
        clustering=clustering(placed),
    )


def dies(lines: Iterable[DeviceLine]) -> tuple[Die, ...]:
    """The devices whose wafer, row and column are known; of two in one place the last by serial."""
    placed = [
        line
        for line in lines
        if line.wafer is not None and line.die_row is not None and line.die_column is not None
    ]
    several = len({line.lot for line in placed}) > 1
    found = {}
    for line in placed:
        die = Die(
            serial=line.serial,
            wafer=f"{line.lot} {line.wafer}" if several else str(line.wafer),
            row=int(line.die_row or 0),
            column=int(line.die_column or 0),
            accepted=line.decision == "accept",
            decision=line.decision,
            grade=line.grade,
        )
        found[die.wafer, die.row, die.column] = die
    return tuple(found[place] for place in sorted(found))


def wafer_yields(placed: Sequence[Die]) -> tuple[PartYield, ...]:
    """Yield of each wafer."""
    return _yields(placed, lambda die: die.wafer)


def radius_yields(placed: Sequence[Die]) -> tuple[PartYield, ...]:
    """Yield in rings of equal area about the middle of the dies' positions, inmost first.

    Rows and columns are taken to be equally far apart, and every wafer of the lot to have the
    same layout.
    """
    if not placed:
        return ()
    middle_row = (min(die.row for die in placed) + max(die.row for die in placed)) / 2
    middle_column = (min(die.column for die in placed) + max(die.column for die in placed)) / 2

    def radius(die: Die) -> float:
        return hypot(die.row - middle_row, die.column - middle_column)

    edge = max(map(radius, placed)) or 1.0

    def ring(die: Die) -> str:
        number = min(int(RINGS * (radius(die) / edge) ** 2), RINGS - 1)
        inner, outer = sqrt(number / RINGS), sqrt((number + 1) / RINGS)
        return f"{100 * inner:.0f} to {100 * outer:.0f} % of the radius"

    return _yields(sorted(placed, key=radius), ring)


def reticle_yields(
    placed: Sequence[Die], *, rows: int, columns: int, first: tuple[int, int] = (0, 0)
) -> tuple[PartYield, ...]:
    """Yield by place in the reticle, which prints ``rows`` x ``columns`` dies at a time.

    ``first`` is the wafer row and column of a die that is printed by the reticle's first place.
    """

    def place(die: Die) -> str:
        return f"row {(die.row - first[0]) % rows}, column {(die.column - first[1]) % columns}"

    return _yields(sorted(placed, key=place), place)


def _yields(placed: Iterable[Die], part_of: Callable[[Die], str]) -> tuple[PartYield, ...]:
    parts: defaultdict[str, list[bool]] = defaultdict(list)
    for die in placed:
        parts[part_of(die)].append(die.accepted)
    return tuple(
        PartYield(part, sum(good), len(good), wilson(sum(good), len(good)))
        for part, good in parts.items()
    )


def clustering(placed: Sequence[Die]) -> Clustering:
    """How clustered the failed dies of a lot are.

    The number of failed dies of each wafer is taken as given (sampling without replacement), so
    that a bad wafer alone does not look clustered. Mean and spread are exact; the probability
    comes from 9999 random arrangements with a fixed seed, (1 + as many or more) / 10 000.

    References
    ----------
    .. [1] P. A. P. Moran, J. R. Stat. Soc. B 10 (1948) 243 (join counts).
    .. [2] A. D. Cliff, J. K. Ord, Spatial Processes, Pion, 1981, section 1.4.
    """
    wafers: defaultdict[str, list[Die]] = defaultdict(list)
    for die in placed:
        wafers[die.wafer].append(die)
    generator = np.random.default_rng(SEED)
    pairs, expected, variance = 0, 0.0, 0.0
    shuffled = np.zeros(SHUFFLES, dtype=np.int64)
    for group in wafers.values():
        joins = _joins(group)
        failed = np.array([not die.accepted for die in group])
        pairs += int(np.sum(failed[joins[:, 0]] & failed[joins[:, 1]]))
        mean, spread = _moments(joins, len(group), int(failed.sum()))
        expected += mean
        variance += spread
        batch = max(1, BATCH // max(len(joins), len(group)))
        for start in range(0, SHUFFLES, batch):
            part = shuffled[start : start + batch]
            chance = generator.permuted(np.tile(failed, (len(part), 1)), axis=1)
            part += np.count_nonzero(chance[:, joins[:, 0]] & chance[:, joins[:, 1]], axis=1)
    probability = (1 + int(np.count_nonzero(shuffled >= pairs))) / (1 + SHUFFLES)
    return Clustering(pairs, expected, sqrt(variance), probability)


def _joins(group: Sequence[Die]) -> NDArray[np.int64]:
    """Pairs of neighbours as indices into ``group``, shape (J, 2)."""
    at = {(die.row, die.column): number for number, die in enumerate(group)}
    joins = [
        (number, at[row + down, column + right])
        for (row, column), number in at.items()
        for down, right in ((0, 1), (1, -1), (1, 0), (1, 1))
        if (row + down, column + right) in at
    ]
    return np.array(joins, dtype=np.int64).reshape(-1, 2)


def _moments(joins: NDArray[np.int64], dies: int, failed: int) -> tuple[float, float]:
    """Mean and variance of the number of joins with both ends failed, F of N at random.

    Two different joins share an end or not: the chance that both have all ends failed is that
    of three or of four given dies.
    """
    count = len(joins)
    chance = [1.0]
    for number in range(4):
        chance.append(chance[-1] * max(failed - number, 0) / max(dies - number, 1))
    degrees = np.bincount(joins.ravel(), minlength=dies)
    sharing = float(np.sum(degrees * (degrees - 1)))  # ordered pairs of joins with a common end
    apart = count * (count - 1) - sharing
    mean = count * chance[2]
    second = mean + sharing * chance[3] + apart * chance[4]
    return mean, max(second - mean**2, 0.0)
