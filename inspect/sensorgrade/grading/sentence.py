"""Sentences that say how a reading stands to a limit."""

from functools import cache

from sensorgrade.defects.defect import DefectCount
from sensorgrade.grading.decision import Outcome
from sensorgrade.grading.selection import Reading
from sensorgrade.recipe.model import Limit
from sensorgrade.wording import doubt_text, name_text, number_text, unit_text

BEYOND_DOUBT = 1e-5  # of a margin: an uncertainty below that is not worth a comparison


PLAIN = 0.05  # a count so sure is told as found, without its doubt


@cache
def allowed(limit: Limit) -> str:
    """``"at most 5 electron"``."""
    words = "at most" if limit.relation == "<=" else "at least"
    held = "" if limit.temperature is None else f" at {number_text(limit.temperature)} °C"
    return f"{words} {number_text(limit.bound, 6)}{_unit(limit)}{held}"


def stated(limit: Limit) -> str:
    """``"read noise of output left at most 5 electron"``: a limit with the place it holds for."""
    return f"{_limited(limit)} {allowed(limit)}"


def varied(limit: Limit) -> str:
    """``"read noise at most [electron]"``, for a list of bounds."""
    words = "at most" if limit.relation == "<=" else "at least"
    unit = f" [{unit_text(limit.unit)}]" if limit.unit else ""
    return f"{_limited(limit)} {words}{unit}"


def _limited(limit: Limit) -> str:
    place = [f"zone {limit.zone}"] if limit.zone is not None else []
    place += [limit.scope] if limit.scope is not None else []
    of = {"every": "", "worst": ", worst of all,", "mean": ", mean of all,"}[limit.of]
    return f"{name_text(limit.name)}{' of ' + ', '.join(place) if place else ''}{of}"


def standing(
    reading: Reading,
    limit: Limit,
    *,
    grade: str,
    outcome: Outcome,
    margin: float,
    probability: float,
    rule: str,
    confidence: float,
) -> str:
    """The reason of a decided limit: number, limit, margin and place in one sentence."""
    side = "inside it" if margin >= 0 else "past it"
    distance = f"{number_text(abs(margin), 3)}{_unit(limit)} {side}"
    if margin == 0:
        distance = "exactly on it"
    plain = isinstance(reading, DefectCount) and reading.standard_uncertainty < PLAIN
    if not plain and reading.standard_uncertainty > BEYOND_DOUBT * abs(margin) > 0:
        distance += f" ({abs(margin) / reading.standard_uncertainty:.1f} standard uncertainties)"
    text = f"{_subject(reading, limit)}; {grade} allows {allowed(limit)}: {distance}"
    return text + _ruling(outcome, margin, probability, rule, confidence) + "."


def missing(limit: Limit, *, grade: str, scope: str, why: str) -> str:
    """The reason of a limit that cannot be decided because a number is missing."""
    return f"{_place(limit.name, scope)}: {why}; {grade} allows {allowed(limit)}."


def _subject(reading: Reading, limit: Limit) -> str:
    doubt = reading.standard_uncertainty
    named = _place(limit.name, reading.scope)
    if isinstance(reading, DefectCount):
        if max(doubt, abs(reading.expected - reading.found)) < PLAIN:
            return f"{named}: {reading.found} found"
        return (
            f"{named}: {reading.found} found ({doubt_text(reading.expected, doubt, '')} by their"
            " probabilities)"
        )
    held = "" if limit.temperature is None else f", taken to {number_text(limit.temperature)} °C,"
    return f"{named}{held} is {doubt_text(reading.value, doubt, limit.unit)}"


@cache
def _place(name: str, scope: str) -> str:
    """The quantity and where: ``Read noise of output left``."""
    words = name_text(name)
    words = words[0].upper() + words[1:]
    if scope == "device":
        return words
    return f"{words}, {scope}," if scope.startswith("mean of ") else f"{words} of {scope}"


def _unit(limit: Limit) -> str:
    return f" {unit_text(limit.unit)}" if limit.unit else ""


def _ruling(
    outcome: Outcome, margin: float, probability: float, rule: str, confidence: float
) -> str:
    """What the rule adds where it decides otherwise than the plain reading would."""
    if outcome == ("accept" if margin >= 0 else "reject"):
        return ""
    conformity = f"{percent(probability)} sure to conform"
    if outcome == "undecided":
        condition = "accepted" if margin >= 0 else "rejected"
        return f", {conformity}, too close to decide at {confidence:g} %: {condition} on condition"
    if outcome == "reject":
        return f", but only {conformity} where {confidence:g} % is asked ({rule})"
    return f", but {conformity}: not past it with {confidence:g} % confidence ({rule})"


def percent(probability: float) -> str:
    """A probability in %, never rounded up to certainty."""
    if probability > 0.999:
        return "over 99.9 %"
    if probability < 0.001:
        return "under 0.1 %"
    return f"{100 * probability:.3g} %"
