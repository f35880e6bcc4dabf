"""The grade of one device: its readings held against the recipe's limits."""

from collections.abc import Sequence

from sensorgrade.defects.defect import DefectCount
from sensorgrade.grading import sentence
from sensorgrade.grading.conformity import guard_factor, probability_of_conformity
from sensorgrade.grading.decision import Decision, Graded, LimitResult
from sensorgrade.grading.held import Known, held, known
from sensorgrade.grading.rule import conformity_of_count, count_outcome, outcome
from sensorgrade.grading.selection import Reading, reading_value
from sensorgrade.measurement import Finding, Measurement
from sensorgrade.recipe.model import Grade, Limit, Recipe

NO_GRADES = "The recipe asks for no grades, so nothing was decided."


def grade(
    measurements: Sequence[Measurement],
    counts: Sequence[DefectCount],
    findings: Sequence[Finding],
    *,
    recipe: Recipe,
    with_accepted: bool = True,
) -> Graded:
    """The best grade all of whose limits are met, every limit's outcome, and the reasons.

    A limit holds for each reading of its name (see `selection.readings`). One that has no
    reading, or that a finding says can no longer be decided, is undecided and never passed.
    Every limit is decided on its own at the rule's confidence: a device just past any one of
    them is accepted no more often than that limit's rule allows.

    Parameters
    ----------
    measurements, counts, findings : sequences
        All that the stages and the audit said of the device.
    recipe : Recipe
        Its grades, best first, its decision rule, outputs and temperature tolerance.
    with_accepted : bool
        Whether limits that are met stand in the result too; working out their probability and
        sentence is most of the work, which counts when a whole lot is graded again.

    Returns
    -------
    Graded
        ``decision`` is ungraded when the recipe has no grades. A grade without limits is met by
        every device. ``reasons`` say why the device is not at the top grade and are empty when
        it is: limits missed come before those undecided; among the missed, those also missed in
        more of the lower grades first, then the farthest past the limit in proportion to it. Of an
        undecided device, what leaves a grade open comes before what rules a better one out.
    """
    return grade_known(
        known(measurements, counts, findings), recipe=recipe, with_accepted=with_accepted
    )


def grade_known(of_device: Known, *, recipe: Recipe, with_accepted: bool) -> Graded:
    """As `grade`, from readings that are sorted for lookup already."""
    if not recipe.grades:
        return Graded(None, "ungraded", (NO_GRADES,), ())
    results: list[LimitResult] = []
    met: str | None = None
    still_open: list[str] = []
    for level in recipe.grades:
        of_grade = [
            result
            for limit in level.limits
            for result in _results(level, limit, of_device, recipe, with_accepted)
        ]
        results += of_grade
        outcomes = {result.outcome for result in of_grade}
        if met is None and outcomes <= {"accept"}:
            met = level.name
        if "reject" not in outcomes:
            still_open.append(level.name)
    decision: Decision = "accept" if met else "undecided" if still_open else "reject"
    reasons = _reasons(results, met, recipe.grades, still_open)
    return Graded(met, decision, reasons, tuple(results))


def _results(
    level: Grade, limit: Limit, of_device: Known, recipe: Recipe, with_accepted: bool
) -> list[LimitResult]:
    """The outcome of one limit, for every place it holds for."""
    results = []
    for place in held(limit, of_device, recipe=recipe):
        if place.why is None and place.reading is not None:
            decided = _decided(level, limit, place.reading, recipe, with_accepted)
            results += [decided] if decided is not None else []
        else:
            why = place.why or "not measured"
            results.append(_undecided(level, limit, place.scope, why, place.reading))
    return results


def _decided(
    level: Grade, limit: Limit, reading: Reading, recipe: Recipe, with_accepted: bool
) -> LimitResult | None:
    """The outcome of one limit for one reading; None for one that is met and not wanted."""
    rule = limit.rule or recipe.decision.kind
    confidence = recipe.decision.confidence
    value, doubt = reading_value(reading), reading.standard_uncertainty
    margin = limit.bound - value if limit.relation == "<=" else value - limit.bound
    if isinstance(reading, DefectCount):
        ruled = count_outcome(
            reading,
            relation=limit.relation,
            bound=limit.bound,
            confidence=confidence,
            rule=rule,
        )
    else:
        ruled = outcome(
            value,
            relation=limit.relation,
            bound=limit.bound,
            guard=guard_factor(confidence) * doubt,
            rule=rule,
        )
    if ruled == "accept" and not with_accepted:
        return None
    if isinstance(reading, DefectCount):
        probability = conformity_of_count(reading, relation=limit.relation, bound=limit.bound)
    else:
        upper, lower = (limit.bound, None) if limit.relation == "<=" else (None, limit.bound)
        probability = probability_of_conformity(value, doubt, lower=lower, upper=upper)
    reason = sentence.standing(
        reading,
        limit,
        grade=level.name,
        outcome=ruled,
        margin=margin,
        probability=probability,
        rule=rule,
        confidence=confidence,
    )
    return LimitResult(
        grade=level.name,
        limit=limit,
        scope=reading.scope,
        value=value,
        standard_uncertainty=doubt,
        margin=margin,
        margin_in_uncertainties=margin / doubt if doubt > 0.0 else None,
        probability=probability,
        outcome=ruled,
        reason=reason,
    )


def _undecided(
    level: Grade, limit: Limit, scope: str, why: str, reading: Reading | None = None
) -> LimitResult:
    """A limit without a usable reading."""
    return LimitResult(
        grade=level.name,
        limit=limit,
        scope=scope,
        value=None if reading is None else reading_value(reading),
        standard_uncertainty=None if reading is None else reading.standard_uncertainty,
        margin=None,
        margin_in_uncertainties=None,
        probability=None,
        outcome="undecided",
        reason=sentence.missing(limit, grade=level.name, scope=scope, why=why),
    )


def _reasons(
    results: list[LimitResult],
    met: str | None,
    grades: tuple[Grade, ...],
    still_open: Sequence[str],
) -> tuple[str, ...]:
    """One sentence for each place that keeps the device from a better grade.

    Where no grade is met but some are still open, what stands in their way comes first.
    """
    missed = [level.name for level in grades]
    if met is not None:
        missed = missed[: missed.index(met)]
    places: dict[tuple[object, ...], list[LimitResult]] = {}
    for result in results:
        if result.grade in missed and result.outcome != "accept":
            limit = result.limit
            key = (limit.name, limit.relation, limit.of, limit.zone, limit.temperature)
            places.setdefault((*key, result.scope), []).append(result)
    undecided = still_open if met is None else ()
    weighed = sorted(
        places.values(),
        key=lambda of_place: (any(one.grade in undecided for one in of_place), _weight(of_place)),
        reverse=True,
    )
    return tuple(_sentence(of_place) for of_place in weighed)


def _weight(of_place: list[LimitResult]) -> tuple[int, int, float]:
    """Rejections first, then how many grades they cost, then how far past the limit."""
    first = of_place[0]
    rejections = [result for result in of_place if result.outcome == "reject"]
    if rejections:
        return 2, len(rejections), max(_excess(result) for result in rejections)
    if first.margin is None or first.probability is None:
        return 1, len(of_place), 0.0
    return 0, len(of_place), 1.0 - first.probability


def _excess(result: LimitResult) -> float:
    """How far past the limit, in proportion to it; to one unit where the limit is 0."""
    margin = result.margin or 0.0
    return -margin / (abs(result.limit.bound) or 1.0)


def _sentence(of_place: list[LimitResult]) -> str:
    """The best grade's sentence, and which lower grades it costs as well."""
    first, *others = of_place
    text = first.reason.rstrip(".")
    for ruled, verb in (("reject", "misses"), ("undecided", "leaves open")):
        costs = [
            f"{other.grade} ({sentence.allowed(other.limit)})"
            for other in others
            if other.outcome == ruled
        ]
        if costs:
            text += f"; also {verb} {', '.join(costs)}"
    return f"{text}."
