"""Limits of the grades, from texts such as ``"<= 5 electron"``; contradictions are refused."""

import re
from dataclasses import dataclass

from sensorgrade.options import choice, entry, quantity
from sensorgrade.recipe.declared import alternatives, nearest, options
from sensorgrade.recipe.document import (
    Entry,
    Listing,
    Mapping,
    Node,
    Problems,
    Scalar,
    joined,
    shown,
)
from sensorgrade.recipe.model import Grade, Limit, Sensor, Zone
from sensorgrade.recipe.quantities import NUMBER, WrongQuantity, example
from sensorgrade.recipe.quantities import quantity as read_quantity
from sensorgrade.recipe.vocabulary import Vocabulary

BOUND = re.compile(rf"\s*(<=|>=|≤|≥)\s*({NUMBER}(?:\s*[^\s.].*)?)", re.DOTALL)
RANGE = re.compile(
    rf"\s*({NUMBER})(?<!\.)\s*([^\s.][^.]*?)?\s*\.\.\s*({NUMBER})\s*(.*?)\s*", re.DOTALL
)
NUMBER_ALONE = re.compile(NUMBER)
RELATIONS = {"<=": "<=", "≤": "<=", ">=": ">=", "≥": ">="}
CELL_COLOURS = ("red", "green", "green-red", "green-blue", "blue")


@dataclass(frozen=True, slots=True, kw_only=True)
class LimitOptions:
    """A limit in its long form, for a part of the device or under a rule of its own."""

    limit: str = entry('The bound or the range, such as "<= 5 electron"')
    of: str = choice(
        "Which scopes must meet it: every one, the worst, or their mean",
        "every",
        "worst",
        "mean",
        default="every",
    )
    output: str | None = entry("Only this output", default=None)
    colour: str | None = choice(
        "Only this colour plane; green is both of them", *CELL_COLOURS, default=None
    )
    wavelength: str | None = entry(
        "Only this wavelength or filter, as the frames name it", default=None
    )
    scope: str | None = entry("Only this scope, in the words that results use", default=None)
    zone: str | None = entry("Only this zone", default=None)
    at: float | None = quantity(
        "degC", "The sensor temperature that the limit holds for", default=None, minimum=-273.15
    )
    rule: str | None = choice(
        "The decision rule, if not the recipe's",
        "simple",
        "guarded acceptance",
        "guarded rejection",
        "non-binary",
        default=None,
    )


@dataclass(frozen=True, slots=True)
class Context:
    """What limits may refer to in this recipe."""

    vocabulary: Vocabulary
    enabled: frozenset[str]
    outputs: tuple[str, ...]
    coloured: bool
    zones: frozenset[str]


def context(
    vocabulary: Vocabulary, enabled: frozenset[str], sensor: Sensor | None, zones: dict[str, Zone]
) -> Context:
    """The names that limits may use; lenient where the sensor itself could not be read."""
    if sensor is None:
        return Context(vocabulary, enabled, (), True, frozenset(zones))
    return Context(
        vocabulary, enabled, tuple(sensor.outputs), sensor.colour != "none", frozenset(zones)
    )


def grades(node: Node, context: Context, line: int, problems: Problems) -> tuple[Grade, ...]:
    """The grades, best first, with every mistake and contradiction noted."""
    where = "grades"
    if not isinstance(node, Mapping) or not node.entries:
        problems.add(
            line,
            where,
            f"expected grades by name, best first, each with limits, found {shown(node)}",
        )
        return ()
    read = []
    names = list(node.entries)
    for name, item in node.entries.items():
        below = joined(where, name)
        if not name.strip() or not name.isprintable() or len(name) > 60:
            sentence = "expected a name of printable characters, 60 at most"
            problems.add(item.line, below, sentence)
        limits = _grade_limits(item, context, below, problems)
        if isinstance(item.value, Mapping) and not item.value.entries and name != names[-1]:
            problems.add(
                item.line,
                below,
                "expected limits; a grade without any accepts every device, so those after it are"
                " never given",
            )
        _contradictions(limits, below, problems)
        read.append(Grade(name, limits))
    _order(read, problems)
    return tuple(read)


def _grade_limits(
    item: Entry, context: Context, where: str, problems: Problems
) -> tuple[Limit, ...]:
    if not isinstance(item.value, Mapping):
        hint = "; write {} for a grade without limits" if shown(item.value) == "nothing" else ""
        problems.add(item.line, where, f"expected limits by name, found {shown(item.value)}{hint}")
        return ()
    vocabulary = context.vocabulary
    limits: list[Limit] = []
    for name, stated in item.value.entries.items():
        below = joined(where, name)
        if name not in vocabulary.quantities and name not in vocabulary.counts:
            known = (*vocabulary.quantities, *vocabulary.counts)
            problems.add(stated.line, below, f"no such measurement or count{nearest(name, known)}")
            continue
        sources = vocabulary.sources.get(name, ())
        if sources and context.enabled.isdisjoint(sources):
            problems.add(
                stated.line,
                below,
                f"nothing in this recipe measures it; put {alternatives(sources)} under stages",
            )
        parts = stated.value.items if isinstance(stated.value, Listing) else (stated.value,)
        for part in parts:
            limits += _limits(name, part, stated.line, context, below, problems)
    return tuple(limits)


def _limits(
    name: str, node: Node, line: int, context: Context, where: str, problems: Problems
) -> list[Limit]:
    """One stated limit: a text, or a mapping with the text under ``limit``."""
    if isinstance(node, Scalar):
        return [
            Limit(name, relation, bound, unit, node.line)
            for relation, bound, unit in _bounds(name, node, context, where, problems)
        ]
    if not isinstance(node, Mapping):
        problems.add(node.line, where, f"expected a limit or a mapping, found {shown(node)}")
        return []
    _references(node, context, where, problems)
    long = options(LimitOptions, node, line, where, problems)
    stated = node.entries.get("limit")
    if stated is None or not isinstance(stated.value, Scalar):
        return []
    bounds = _bounds(name, stated.value, context, joined(where, "limit"), problems)
    if long is None:
        return []
    return [
        Limit(
            name,
            relation,
            bound,
            unit,
            stated.line,
            of=long.of,
            scope=_scope(long, context),
            zone=long.zone,
            temperature=long.at,
            rule=long.rule,
        )
        for relation, bound, unit in bounds
    ]


def _bounds(
    name: str, node: Scalar, context: Context, where: str, problems: Problems
) -> list[tuple[str, float, str]]:
    """(relation, bound, unit) of a limit's text: one for a bound, two for a range."""
    unit = context.vocabulary.quantities.get(name, "")
    counted = name in context.vocabulary.counts
    form = f'"<= {example(unit)}", ">= {example(unit)}" or "1 .. {example(unit)}"'
    text = node.text
    try:
        if (match := BOUND.fullmatch(text)) is not None:
            bounds = [(RELATIONS[match[1]], read_quantity(match[2], unit))]
        elif (match := RANGE.fullmatch(text)) is not None:
            low, first, high, last = match.groups()
            bounds = [
                (">=", _part(low, first or last, unit)),
                ("<=", _part(high, last, unit)),
            ]
        else:
            raise WrongQuantity(f"write {form}")
    except WrongQuantity as wrong:
        kind = "a count without unit" if counted else f"a limit in {unit}" if unit else "a limit"
        problems.add(node.line, where, f"expected {kind}, found {shown(node)}; {wrong}")
        return []
    for _, bound in bounds:
        if counted and (bound < 0 or bound != int(bound)):
            problems.add(
                node.line, where, f"expected a whole number, 0 or more, found {shown(node)}"
            )
            return []
    if len(bounds) == 2 and (
        bounds[0][1] > bounds[1][1] or (bounds[0][1] == bounds[1][1] and not counted)
    ):
        problems.add(
            node.line,
            where,
            f"expected a range from low to high, found {shown(node)}; no value lies within",
        )
        return []
    return [(relation, bound, unit) for relation, bound in bounds]


def _part(number: str, given: str, unit: str) -> float:
    return read_quantity(f"{number} {given}", unit)


def _references(node: Mapping, context: Context, where: str, problems: Problems) -> None:
    """Note what a limit in its long form refers to that this recipe does not have."""
    for key, names in (("zone", sorted(context.zones)), ("output", context.outputs)):
        entry = node.entries.get(key)
        if entry is None or not isinstance(entry.value, Scalar) or entry.value.empty:
            continue
        if entry.value.text not in names:
            sentence = f"no such {key}{nearest(entry.value.text, names)}"
            problems.add(entry.line, joined(where, key), sentence)
    if "colour" in node.entries and not context.coloured:
        problems.add(
            node.entries["colour"].line,
            joined(where, "colour"),
            "the sensor has no colour filters; state them in sensor.colour or take this out",
        )
    if "scope" in node.entries and {"output", "colour", "wavelength"} & set(node.entries):
        problems.add(
            node.entries["scope"].line,
            joined(where, "scope"),
            "expected either scope or output, colour and wavelength, found both",
        )


def _scope(long: LimitOptions, context: Context) -> str | None:
    """The scope in the words of results: ``"output left, colour red, 550 nm"``."""
    if long.scope is not None:
        return long.scope
    parts = []
    if long.output is not None and len(context.outputs) > 1:
        parts.append(f"output {long.output}")
    if long.colour is not None:
        parts.append(f"colour {long.colour}")
    if long.wavelength is not None:
        parts.append(_wavelength(long.wavelength))
    return ", ".join(parts) or None


def _wavelength(text: str) -> str:
    """As results name it: ``"550 nm"`` for a number or a length, else the filter's own name."""
    try:
        length = f"{text} nm" if NUMBER_ALONE.fullmatch(text) else text
        return f"{read_quantity(length, 'nm'):g} nm"
    except WrongQuantity:
        return text


def _place(limit: Limit) -> tuple[object, ...]:
    """What must be equal for two limits to speak of the same thing."""
    return limit.name, limit.of, limit.scope, limit.zone, limit.temperature


def stated(limit: Limit) -> str:
    """The bound as text: ``"<= 5 electron"``."""
    return f"{limit.relation} {limit.bound:g} {limit.unit}".strip()


def _contradictions(limits: tuple[Limit, ...], where: str, problems: Problems) -> None:
    """Note limits of one grade that repeat each other or leave no value."""
    seen: dict[tuple[object, ...], Limit] = {}
    for later in limits:
        place = _place(later)
        below = joined(where, later.name)
        earlier = seen.setdefault((*place, later.relation), later)
        if earlier is not later:
            sentence = f"a second limit on the same thing, first in line {earlier.line}; keep one"
            problems.add(later.line, below, sentence)
        other = seen.get((*place, "<=" if later.relation == ">=" else ">="))
        if other is None:
            continue
        low, high = (later, other) if later.relation == ">=" else (other, later)
        if low.bound > high.bound or (low.bound == high.bound and low.line != high.line):
            problems.add(
                later.line,
                below,
                f"{stated(later)} contradicts {stated(other)} of line {other.line};"
                " no value meets both",
            )


def _order(grades: list[Grade], problems: Problems) -> None:
    """Note limits that are tighter than a better grade's."""
    loosest: dict[tuple[object, ...], tuple[str, Limit]] = {}
    for grade in grades:
        for limit in grade.limits:
            key = (*_place(limit), limit.relation)
            name, better = loosest.get(key, (grade.name, limit))
            sign = 1 if limit.relation == "<=" else -1
            if sign * (limit.bound - better.bound) < 0 and name != grade.name:
                problems.add(
                    limit.line,
                    f"grades.{grade.name}.{limit.name}",
                    f"{stated(limit)} is tighter than {stated(better)} of the better grade"
                    f" {name} (line {better.line}); grades stand best first",
                )
            else:
                loosest[key] = (grade.name, limit)
