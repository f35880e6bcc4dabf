"""What the devices of a lot say together: yields, capability, outliers, acceptance of the lot."""

from collections.abc import Sequence
from dataclasses import dataclass
from math import sqrt

import numpy as np
from numpy.typing import NDArray

from sensorgrade.defects.defect import DefectCount
from sensorgrade.grading.capability import Capability, capability, robust_outlier_factor
from sensorgrade.grading.conformity import guard_factor
from sensorgrade.grading.decision import Graded, Outcome
from sensorgrade.grading.held import DeviceReadings, held
from sensorgrade.grading.interval import Interval, clopper_pearson, wilson
from sensorgrade.grading.risk import Risks, global_risks
from sensorgrade.grading.sampling_plan import SamplingPlan, drawn, standard_plan
from sensorgrade.grading.selection import reading_value
from sensorgrade.recipe.model import Limit, LotPlan, Recipe

MAD_TO_SD = 1.4826022  # of a normal distribution
FEWEST_FOR_OUTLIERS = 8  # below it the median deviation itself is too uncertain


@dataclass(frozen=True, slots=True)
class GradeYield:
    """Devices that reached ``grade`` or a better one, and 95 % intervals of that share."""

    grade: str
    reached: int
    devices: int
    wilson: Interval
    clopper_pearson: Interval


@dataclass(frozen=True, slots=True)
class Outlier:
    """A device far from the lot, ``distance`` robust standard deviations from its median."""

    serial: str
    scope: str
    value: float
    distance: float


@dataclass(frozen=True, slots=True)
class LimitStatistics:
    """How the lot stands to one limit of one grade, over all devices and places decided.

    ``robust_spread`` is from the median absolute deviation. ``measured_doubt`` is the root mean
    square of the standard uncertainties. ``capability`` is None where values do not differ or a
    count is 0 throughout; ``risks`` are those of the rule if the lot is a normal process whose
    true spread is the observed one less the measurement's, None for counts.
    """

    grade: str
    limit: Limit
    values: int
    undecidable: int
    mean: float
    spread: float
    median: float
    robust_spread: float
    least: float
    largest: float
    measured_doubt: float
    capability: Capability | None
    risks: Risks | None
    outliers: tuple[Outlier, ...]


@dataclass(frozen=True, slots=True)
class LotDecision:
    """Acceptance of the lot: devices of the sample, how many failed, and what follows."""

    plan: SamplingPlan
    judged: tuple[str, ...]
    failed: int
    undecided: int
    outcome: Outcome
    sentence: str


def yields(graded: Sequence[Graded], *, recipe: Recipe) -> tuple[GradeYield, ...]:
    """Yield of each grade, best first; a device counts for its own grade and those below."""
    order = [level.name for level in recipe.grades]
    places = [order.index(one.grade) if one.grade is not None else len(order) for one in graded]
    return tuple(
        GradeYield(
            name,
            reached,
            len(places),
            wilson(reached, len(places)),
            clopper_pearson(reached, len(places)),
        )
        for at, name in enumerate(order)
        for reached in (sum(place <= at for place in places),)
    )


def limit_statistics(
    devices: Sequence[DeviceReadings], *, recipe: Recipe
) -> tuple[LimitStatistics, ...]:
    """Statistics of every limit that two devices or more have values for, grade by grade.

    Outliers lie farther from the median than normal values of so large a lot would once in
    twenty lots, in robust standard deviations; not looked for below 8 devices or where more than
    half of the values are equal.
    """
    found = []
    for level in recipe.grades:
        for limit in level.limits:
            serials, scopes, values, doubts = [], [], [], []
            undecidable, counted = 0, False
            for device in devices:
                for place in held(limit, device.known, recipe=recipe):
                    if place.why is not None or place.reading is None:
                        undecidable += 1
                        continue
                    serials.append(device.serial)
                    scopes.append(place.scope)
                    values.append(reading_value(place.reading))
                    doubts.append(place.reading.standard_uncertainty)
                    counted = counted or isinstance(place.reading, DefectCount)
            if len(values) < 2:
                continue
            array, doubt = np.array(values), sqrt(float(np.mean(np.square(doubts))))
            found.append(
                _statistics(
                    level.name,
                    limit,
                    array,
                    doubt,
                    undecidable=undecidable,
                    counted=counted,
                    recipe=recipe,
                    outliers=_outliers(serials, scopes, array),
                )
            )
    return tuple(found)


def lot_decision(
    serials: Sequence[str], graded: Sequence[Graded], *, plan: LotPlan
) -> LotDecision | None:
    """Whether the lot is accepted by its sample; None where the recipe states no plan.

    A device fails when it misses every grade. Devices still undecided leave the lot undecided
    where they could tip it. When more devices were inspected than the sample asks for, the sample
    is drawn from them by the digest of their serials, which no result can influence; when fewer
    were, the lot is undecided unless too many failed already.

    Raises
    ------
    RequestError
        ISO 2859-1 has no plan for the quality limit.
    """
    if plan.quality_limit is not None:
        sampling = standard_plan(len(serials), plan.quality_limit)
    elif plan.sample_size is not None and plan.acceptance_number is not None:
        sampling = SamplingPlan(plan.sample_size, plan.acceptance_number)
    else:
        return None
    decisions = {serial: one.decision for serial, one in zip(serials, graded, strict=True)}
    judged = drawn(list(serials), sampling.size)
    failed = sum(decisions[serial] == "reject" for serial in judged)
    unknown = sum(decisions[serial] == "undecided" for serial in judged)
    missing = sampling.size - len(judged)
    outcome: Outcome = "undecided"
    if failed > sampling.accept:
        outcome = "reject"
    elif failed + unknown + missing <= sampling.accept:
        outcome = "accept"
    text = (
        f"{failed} of {len(judged)} devices judged missed every grade; the lot is accepted on"
        f" {sampling.accept} or fewer in {sampling.size}"
    )
    if unknown:
        text += f"; {unknown} are undecided"
    if missing:
        text += f"; {missing} are still to be inspected"
    return LotDecision(sampling, tuple(judged), failed, unknown, outcome, text + ".")


def _statistics(
    grade: str,
    limit: Limit,
    values: NDArray[np.float64],
    doubt: float,
    *,
    undecidable: int,
    counted: bool,
    recipe: Recipe,
    outliers: tuple[Outlier, ...],
) -> LimitStatistics:
    mean, spread = float(values.mean()), float(values.std(ddof=1))
    upper, lower = (limit.bound, None) if limit.relation == "<=" else (None, limit.bound)
    able = capability(mean, spread, values.size, lower=lower, upper=upper) if spread > 0 else None
    return LimitStatistics(
        grade=grade,
        limit=limit,
        values=values.size,
        undecidable=undecidable,
        mean=mean,
        spread=spread,
        median=float(np.median(values)),
        robust_spread=_robust_spread(values),
        least=float(values.min()),
        largest=float(values.max()),
        measured_doubt=doubt,
        capability=able,
        risks=None if counted else _risks(limit, mean, spread, doubt, recipe),
        outliers=outliers,
    )


def _risks(limit: Limit, mean: float, spread: float, doubt: float, recipe: Recipe) -> Risks | None:
    """Risks of the limit's rule; None when the spread seen is no more than the measurement's."""
    true_variance = spread**2 - doubt**2
    if true_variance <= 0.0:
        return None
    rule = limit.rule or recipe.decision.kind
    guard = guard_factor(recipe.decision.confidence) * doubt
    guard = {"simple": 0.0, "guarded rejection": -guard}.get(rule, guard)
    if limit.relation == "<=":
        return global_risks(
            mean,
            sqrt(true_variance),
            doubt,
            upper=limit.bound,
            accept_below=limit.bound - guard,
        )
    return global_risks(
        mean, sqrt(true_variance), doubt, lower=limit.bound, accept_above=limit.bound + guard
    )


def _robust_spread(values: NDArray[np.float64]) -> float:
    return float(MAD_TO_SD * np.median(np.abs(values - np.median(values))))


def _outliers(
    serials: Sequence[str], scopes: Sequence[str], values: NDArray[np.float64]
) -> tuple[Outlier, ...]:
    """Devices far from the lot, the farthest first."""
    spread = _robust_spread(values)
    if values.size < FEWEST_FOR_OUTLIERS or spread == 0.0:
        return ()
    distance = (values - np.median(values)) / spread
    far = np.flatnonzero(np.abs(distance) > robust_outlier_factor(values.size)).tolist()
    return tuple(
        Outlier(serials[at], scopes[at], float(values[at]), float(distance[at]))
        for at in sorted(far, key=lambda at: (-abs(distance[at]), at))
    )
