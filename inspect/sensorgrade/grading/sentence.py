"""Sentences that say how a reading stands to a limit."""

from functools import cache
from math import floor, log10

from sensorgrade.defects.defect import DefectCount
from sensorgrade.grading.decision import Outcome
from sensorgrade.grading.selection import Reading
from sensorgrade.recipe.model import Limit

ACRONYMS = frozenset({"dsnu", "prnu", "cti", "adc"})


def with_doubt(value: float, standard_uncertainty: float) -> str:
    """``"5.632 ± 0.081"``: two digits of the uncertainty, the value to the same place."""
    if standard_uncertainty <= 0.0:
        return f"{value:.6g}"
    place = 1 - floor(log10(standard_uncertainty))
    if place < 0:
        return f"{round(value, place):.0f} ± {round(standard_uncertainty, place):.0f}"
    if place > 6:
        return f"{value:.4g} ± {standard_uncertainty:.2g}"
    return f"{value:.{place}f} ± {standard_uncertainty:.{place}f}"


@cache
def wording(name: str) -> str:
    """A recipe's name as people write it: ``read_noise`` is read noise, ``prnu`` is PRNU."""
    words = name.split("_")
    return " ".join(word.upper() if word in ACRONYMS else word for word in words)


@cache
def allowed(limit: Limit) -> str:
    """``"at most 5 electron"``."""
    words = "at most" if limit.relation == "<=" else "at least"
    unit = "" if limit.unit == "" else " " + compact(limit.unit)
    held = "" if limit.temperature is None else f" at {limit.temperature:g} degC"
    return f"{words} {limit.bound:g}{unit}{held}"


@cache
def compact(unit: str) -> str:
    """``electron / s`` as ``electron/s``."""
    return unit.replace(" / ", "/")


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
    unit = "" if limit.unit == "" else " " + compact(limit.unit)
    side = "inside it" if margin >= 0 else "past it"
    distance = f"{abs(margin):.3g}{unit} {side}"
    if margin == 0:
        distance = "exactly on it"
    if reading.standard_uncertainty > 0:
        distance += f" ({abs(margin) / reading.standard_uncertainty:.1f} standard uncertainties)"
    text = f"{_subject(reading, limit, unit)}; {grade} allows {allowed(limit)}: {distance}"
    return text + _ruling(outcome, margin, probability, rule, confidence) + "."


def missing(limit: Limit, *, grade: str, scope: str, why: str) -> str:
    """The reason of a limit that cannot be decided because a number is missing."""
    return f"{_place(limit.name, scope)}: {why}; {grade} allows {allowed(limit)}."


def _subject(reading: Reading, limit: Limit, unit: str) -> str:
    doubt = reading.standard_uncertainty
    named = _place(limit.name, reading.scope)
    if isinstance(reading, DefectCount):
        return (
            f"{named}: {reading.found} found ({with_doubt(reading.expected, doubt)} by their"
            " probabilities)"
        )
    held = "" if limit.temperature is None else f", taken to {limit.temperature:g} degC,"
    return f"{named}{held} is {with_doubt(reading.value, doubt)}{unit}"


@cache
def _place(name: str, scope: str) -> str:
    """The quantity and where: ``Read noise of output left``."""
    words = wording(name)
    words = words[0].upper() + words[1:]
    if scope == "device":
        return words
    return f"{words}, {scope}," if scope.startswith("mean of ") else f"{words} of {scope}"


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
