"""Every limit as a bar: how much of the limit is left, on one scale for all of them."""

from collections.abc import Sequence
from dataclasses import dataclass

from sensorgrade.grading.decision import Graded, LimitResult
from sensorgrade.wording import doubt_text, name_text, number_text, unit_text

# The bar runs from a margin of 100 % of the limit (left) over the limit to 50 % past it.
LEFT_MARGIN, RIGHT_MARGIN = 1.0, -0.5
LIMIT_AT = 100 * LEFT_MARGIN / (LEFT_MARGIN - RIGHT_MARGIN)
COVERAGE = 2.0  # whiskers reach so many standard uncertainties to each side


@dataclass(frozen=True, slots=True)
class Bar:
    """One limit as the page draws it; places are in % of the bar's width, None: not measured.

    ``beyond`` is "left" or "right" where the value lies past the bar's end, else "".
    """

    name: str
    place: str
    outcome: str
    value: str
    limit: str
    margin: str
    reason: str
    at: float | None
    whisker_from: float
    whisker_to: float
    beyond: str


@dataclass(frozen=True, slots=True)
class BarGroup:
    """The limits of one grade; ``shown`` when it is the one that the decision turns on."""

    grade: str
    standing: str
    shown: bool
    bars: tuple[Bar, ...]


def bar_groups(graded: Graded) -> tuple[BarGroup, ...]:
    """Limits grade by grade, best grade first, those that cost the grade on top."""
    names = list(dict.fromkeys(result.grade for result in graded.limits))
    turning = graded.grade if graded.grade is not None else (names[-1] if names else None)
    groups = []
    for name in names:
        results = [result for result in graded.limits if result.grade == name]
        outcomes = [result.outcome for result in results]
        standing = _standing(outcomes)
        shown = name == turning or name == names[0]
        ordered = sorted(results, key=_closeness)
        groups.append(BarGroup(name, standing, shown, tuple(bar(one) for one in ordered)))
    return tuple(groups)


def _standing(outcomes: Sequence[str]) -> str:
    missed, open_ = outcomes.count("reject"), outcomes.count("undecided")
    if not missed and not open_ and len(outcomes) == 1:
        return "met: its one limit"
    if missed:
        return f"missed: {missed} of {len(outcomes)} limits not met" + (
            f", {open_} undecided" if open_ else ""
        )
    if open_:
        return f"open: {open_} of {len(outcomes)} limits undecided"
    return f"met: all {len(outcomes)} limits" if outcomes else "met: it has no limits"


def _closeness(result: LimitResult) -> tuple[int, float]:
    """Rejects, then undecided, then accepts; within each the smallest share of the limit left."""
    order = {"reject": 0, "undecided": 1, "accept": 2}[result.outcome]
    return order, float("-inf") if result.margin is None else _share(result)


def _share(result: LimitResult) -> float:
    """Margin over the limit; over the value where the limit is 0."""
    assert result.margin is not None
    return result.margin / _unit_length(result)


def _unit_length(result: LimitResult) -> float:
    return abs(result.limit.bound) or abs(result.value or 0.0) or 1.0


def bar(result: LimitResult) -> Bar:
    """One limit's result as a bar."""
    limit = result.limit
    sign = "≤" if limit.relation == "<=" else "≥"
    bound = f"{sign} {number_text(limit.bound, 6)} {unit_text(limit.unit)}".rstrip()
    if limit.temperature is not None:
        bound += f" at {number_text(limit.temperature)} °C"
    where = ", ".join(
        part for part in (result.scope, f"zone {limit.zone}" if limit.zone else "") if part
    )
    at, start, end, beyond = None, 0.0, 0.0, ""
    value = "not measured"
    if result.value is not None and result.margin is not None:
        value = doubt_text(result.value, result.standard_uncertainty, limit.unit)
        share = _share(result)
        half = COVERAGE * (result.standard_uncertainty or 0.0) / _unit_length(result)
        at, start, end = _at(share), _at(share + half), _at(share - half)
        beyond = "left" if share > LEFT_MARGIN else "right" if share < RIGHT_MARGIN else ""
    return Bar(
        name=name_text(limit.name),
        place=where,
        outcome=result.outcome,
        value=value,
        limit=bound,
        margin=_margin_text(result),
        reason=result.reason,
        at=at,
        whisker_from=start,
        whisker_to=end,
        beyond=beyond,
    )


def _at(share: float) -> float:
    place = 100 * (LEFT_MARGIN - share) / (LEFT_MARGIN - RIGHT_MARGIN)
    return round(min(max(place, 0.0), 100.0), 2)


def _margin_text(result: LimitResult) -> str:
    """How close: in standard uncertainties where there are any, else in the limit's unit."""
    if result.margin is None:
        return "—"
    side = "inside" if result.margin >= 0 else "past"
    if result.margin_in_uncertainties is None:
        unit = unit_text(result.limit.unit)
        return f"{number_text(abs(result.margin), 3)} {unit} {side}".replace("  ", " ")
    distance = abs(result.margin_in_uncertainties)
    return f"{'> 100' if distance > 100 else f'{distance:.1f}'} u {side}"


def closest(graded: Graded) -> LimitResult | None:
    """The limit of the grade met that was met by least, None when there is none."""
    measured = [
        one for one in graded.limits if one.grade == graded.grade and one.margin is not None
    ]
    return min(measured, key=_share, default=None)
