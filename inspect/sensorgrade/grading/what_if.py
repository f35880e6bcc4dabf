"""What a lot's yield would be against other limits, and what it would take to reach a number."""

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import combinations
from math import ceil, floor, inf, log10

import numpy as np
from numpy.typing import NDArray

from sensorgrade.defects.defect import DefectCount
from sensorgrade.grading.conformity import guard_factor
from sensorgrade.grading.held import DeviceReadings, Held, held
from sensorgrade.grading.rule import count_outcome
from sensorgrade.grading.selection import reading_value
from sensorgrade.recipe.model import Grade, Limit, Recipe


@dataclass(frozen=True, slots=True)
class Tightest:
    """For each device and limit of one grade, the tightest bound that would accept it.

    ``bounds`` (D, L) in each limit's unit; infinite (in the limit's loose direction) where the
    device can never be accepted because the number is missing or barred. A device is accepted
    exactly when every limit's bound is at least as loose as its own, so that yields against any
    other bounds follow without grading again.
    """

    serials: tuple[str, ...]
    limits: tuple[Limit, ...]
    bounds: NDArray[np.float64]

    @property
    def excess(self) -> NDArray[np.float64]:
        """How far each device's bound is looser than the limit (D, L); accepted at 0 or less."""
        signs = np.array([1.0 if limit.relation == "<=" else -1.0 for limit in self.limits])
        stated = np.array([limit.bound for limit in self.limits])
        loose: NDArray[np.float64] = signs * (self.bounds - stated)
        return loose

    @property
    def missed(self) -> NDArray[np.bool_]:
        """Which limits each device misses, (D, L)."""
        return self.excess > 0.0


def tightest(devices: Sequence[DeviceReadings], *, level: Grade, recipe: Recipe) -> Tightest:
    """The tightest bounds of a lot for one grade, under the recipe's decision rules.

    For a measured quantity that is its reading moved by the guard band; for a count under a rule
    with confidence, the least whole number that the count meets with that confidence. Undecided
    counts as not accepted.
    """
    bounds = np.empty((len(devices), len(level.limits)))
    for row, device in enumerate(devices):
        for column, limit in enumerate(level.limits):
            places = held(limit, device.known, recipe=recipe)
            worst = [_bound(place, limit, recipe) for place in places]
            bounds[row, column] = max(worst) if limit.relation == "<=" else min(worst)
    return Tightest(tuple(device.serial for device in devices), level.limits, bounds)


@dataclass(frozen=True, slots=True)
class YieldCurve:
    """Devices accepted against one limit's bound, the other limits held as they are.

    ``bounds`` ascend; ``accepted`` is the number of devices accepted when the bound is exactly
    that. ``reachable`` is the number that any bound at all could accept.
    """

    limit: Limit
    bounds: NDArray[np.float64]
    accepted: NDArray[np.int64]
    reachable: int


def yield_curve(
    lot: Tightest, *, limit: int, bounds: NDArray[np.float64] | None = None
) -> YieldCurve:
    """Yield against the bound of limit number ``limit``; where it changes, or at ``bounds``."""
    others = np.delete(lot.missed, limit, axis=1).any(axis=1)
    own = lot.bounds[~others, limit]
    own = np.sort(own[np.isfinite(own)])
    if bounds is None:
        bounds = np.unique(np.append(own, lot.limits[limit].bound))
    if lot.limits[limit].relation == "<=":
        accepted = np.searchsorted(own, bounds, side="right")
    else:
        accepted = own.size - np.searchsorted(own, bounds, side="left")
    return YieldCurve(lot.limits[limit], bounds, accepted.astype(np.int64), own.size)


def worth_showing(lot: Tightest, *, limit: int, steps: int) -> NDArray[np.float64]:
    """At most ``steps`` bounds of one limit, evenly spread over the devices, its own among them.

    Each is loosened to few digits, so that it accepts at least the devices it was taken from.
    """
    of_limit = lot.limits[limit]
    own = lot.bounds[:, limit]
    own = np.sort(own[np.isfinite(own)])
    places = np.unique(np.linspace(0, max(own.size - 1, 0), steps - 1).astype(int))
    chosen = own[places] if own.size else own
    rounded = [loosened(float(one), relation=of_limit.relation) for one in chosen]
    return np.unique([*rounded, of_limit.bound])


@dataclass(frozen=True, slots=True)
class YieldGrid:
    """Devices accepted against the bounds of two limits; ``accepted`` is (F, S)."""

    first: Limit
    second: Limit
    first_bounds: NDArray[np.float64]
    second_bounds: NDArray[np.float64]
    accepted: NDArray[np.int64]


def yield_grid(
    lot: Tightest,
    *,
    first: int,
    second: int,
    first_bounds: NDArray[np.float64],
    second_bounds: NDArray[np.float64],
) -> YieldGrid:
    """Yield against two limits at once, the others held as they are."""
    others = np.delete(lot.missed, [first, second], axis=1).any(axis=1)
    passes = [
        own[None, :] <= bounds[:, None]
        if lot.limits[column].relation == "<="
        else own[None, :] >= bounds[:, None]
        for column, bounds in ((first, first_bounds), (second, second_bounds))
        for own in (np.where(others, np.nan, lot.bounds[:, column]),)
    ]
    accepted = passes[0].astype(np.int64) @ passes[1].T.astype(np.int64)
    return YieldGrid(lot.limits[first], lot.limits[second], first_bounds, second_bounds, accepted)


@dataclass(frozen=True, slots=True)
class Cost:
    """What one limit costs: devices that miss it, that miss it alone, that cannot be decided."""

    limit: Limit
    missed: int
    alone: int
    undecidable: int


def costs(lot: Tightest) -> tuple[Cost, ...]:
    """Every limit's cost, the dearest first: by devices lost to it alone, then by all it loses."""
    missed = lot.missed
    alone = missed & (missed.sum(axis=1, keepdims=True) == 1)
    unknown = ~np.isfinite(lot.bounds)
    found = [
        Cost(limit, int(missed[:, i].sum()), int(alone[:, i].sum()), int(unknown[:, i].sum()))
        for i, limit in enumerate(lot.limits)
    ]
    return tuple(sorted(found, key=lambda cost: (-cost.alone, -cost.missed)))


@dataclass(frozen=True, slots=True)
class Concession:
    """One limit, and the bound to which it would have to be eased."""

    limit: Limit
    bound: float


@dataclass(frozen=True, slots=True)
class Concessions:
    """Limits to ease, the devices accepted then, and which of them are gained."""

    eased: tuple[Concession, ...]
    accepted: int
    gained: tuple[str, ...]


def concessions(lot: Tightest, *, wanted: int) -> Concessions | None:
    """The fewest limits to ease so that ``wanted`` devices are accepted, and by how much.

    Every set of limits is tried, smallest sets first, so none smaller would do. Among sets of
    that size, and among the devices that a set can gain, the choice keeps the largest easing
    least, in proportion to the limit (to one unit for a limit of 0). None when no easing reaches
    the number, because too many devices lack a measurement.
    """
    excess = lot.excess
    missed = excess > 0.0
    accepted = int((~missed.any(axis=1)).sum())
    if accepted >= wanted:
        return Concessions((), accepted, ())
    eligible = np.flatnonzero(np.isfinite(excess).all(axis=1) & missed.any(axis=1))
    lacking = wanted - accepted
    if eligible.size < lacking:
        return None
    scale = np.array([abs(limit.bound) or 1.0 for limit in lot.limits])
    relative = excess[eligible] / scale
    # Devices that miss the same limits stand or fall together, and there are few such patterns.
    patterns, member, sizes = np.unique(
        missed[eligible], axis=0, return_inverse=True, return_counts=True
    )
    columns = np.flatnonzero(patterns.any(axis=0))
    for size in range(1, columns.size + 1):
        best: tuple[float, tuple[int, ...], NDArray[np.int64]] | None = None
        for chosen in combinations(columns.tolist(), size):
            kept = np.delete(patterns, chosen, axis=1)
            freed = kept.sum(axis=1) == 0
            if sizes[freed].sum() < lacking:
                continue
            gained = np.flatnonzero(freed[member.ravel()])
            easing = relative[gained][:, chosen].max(axis=1)
            order = np.argsort(easing, kind="stable")[:lacking]
            largest = float(easing[order[-1]])
            if best is None or largest < best[0]:
                best = (largest, chosen, eligible[gained[order]])
        if best is not None:
            return _eased(lot, best[1], best[2])
    return None


def loosened(bound: float, *, relation: str, digits: int = 4) -> float:
    """``bound`` rounded to so many digits to its loose side; whole numbers stay as they are."""
    if bound == 0.0 or bound == round(bound):
        return bound
    step = 10.0 ** (floor(log10(abs(bound))) + 1 - digits)
    rounded = (ceil if relation == "<=" else floor)(round(bound / step, 6)) * step
    return float(f"{rounded:.{digits}g}")


def _eased(lot: Tightest, chosen: tuple[int, ...], gained: NDArray[np.int64]) -> Concessions:
    """The bounds that accept these devices, and all whom those bounds accept."""
    stated = [limit.bound for limit in lot.limits]
    eased = []
    for column in chosen:
        own = np.append(lot.bounds[gained, column], stated[column])
        loosest = float(own.max() if lot.limits[column].relation == "<=" else own.min())
        if loosest != stated[column]:
            stated[column] = loosened(loosest, relation=lot.limits[column].relation)
        eased.append(Concession(lot.limits[column], stated[column]))
    signs = np.array([1.0 if limit.relation == "<=" else -1.0 for limit in lot.limits])
    now = ~(signs * (lot.bounds - np.array(stated)) > 0.0).any(axis=1)
    new = np.flatnonzero(now & lot.missed.any(axis=1))
    return Concessions(tuple(eased), int(now.sum()), tuple(lot.serials[device] for device in new))


def _bound(place: Held, limit: Limit, recipe: Recipe) -> float:
    """The tightest bound that accepts one place."""
    upward = limit.relation == "<="
    if place.why is not None or place.reading is None:
        return inf if upward else -inf
    rule = limit.rule or recipe.decision.kind
    confidence = recipe.decision.confidence
    reading = place.reading
    value = reading_value(reading)
    if rule == "simple":
        return value
    if isinstance(reading, DefectCount):
        return _count_bound(reading, limit.relation, confidence, rule)
    outward = guard_factor(confidence) * reading.standard_uncertainty
    if rule == "guarded rejection":
        outward = -outward
    return value + outward if upward else value - outward


def _count_bound(count: DefectCount, relation: str, confidence: float, rule: str) -> float:
    """The tightest whole number that accepts a count."""

    def accepts(bound: int) -> bool:
        ruled = count_outcome(
            count, relation=relation, bound=bound, confidence=confidence, rule=rule
        )
        return ruled == "accept"

    # From far inside, where nothing is accepted, outward: by halving, as acceptance is monotonic.
    reach = ceil(8.0 * count.standard_uncertainty) + 8
    step = 1 if relation == "<=" else -1
    inside = floor(count.expected) - step * reach
    outside = ceil(count.expected) + step * reach
    while abs(outside - inside) > 1:
        middle = (inside + outside) // 2
        if accepts(middle):
            outside = middle
        else:
            inside = middle
    return float(max(outside, 0))
