"""From the tree of a recipe to option objects, by what their fields declare.

A mistake is noted and reading goes on, so that the user hears of all of them at once. What stands
in place of a value that could not be read is never used: the recipe is refused at the end.
"""

import difflib
import re
import types
from collections.abc import Collection
from dataclasses import MISSING, Field, fields, is_dataclass
from functools import cache, reduce
from operator import or_
from typing import Any, Union, get_args, get_origin, get_type_hints

from sensorgrade.options import Declared
from sensorgrade.recipe.document import Listing, Mapping, Node, Problems, Scalar, joined, shown
from sensorgrade.recipe.model import HeaderSection, Section
from sensorgrade.recipe.quantities import NUMBER, WrongQuantity, quantity
from sensorgrade.recipe.section import WrongSection, output_section, section

OUTPUT_SECTION = Section | HeaderSection  # of an output, which a header may state
MOST_NAMES = 12  # valid names that a message lists


@cache
def annotations(cls: type) -> dict[str, Any]:
    """The annotations of an options class, resolved."""
    return get_type_hints(cls)


def declaration(field: "Field[Any]") -> Declared:
    """What ``field`` declares of its recipe key."""
    declared: Declared = field.metadata["declared"]
    return declared


def required(field: "Field[Any]") -> bool:
    """Whether the recipe must give the key."""
    return field.default is MISSING and field.default_factory is MISSING


def nearest(name: str, names: Collection[str]) -> str:
    """A hint that ends a message: the valid name nearest to ``name``, else all of a few."""
    close = difflib.get_close_matches(name[:60], names, 1, cutoff=0.6)
    if close:
        return f"; nearest is {close[0]}"
    if not names:
        return "; there are none"
    listed = ", ".join(list(names)[:MOST_NAMES])
    return f"; there are {listed}{', …' if len(names) > MOST_NAMES else ''}"


def alternatives(words: Collection[str]) -> str:
    """``"a, b or c"``."""
    *most, last = words
    return f"{', '.join(most)} or {last}" if most else last


def options(cls: type, node: Node, line: int, where: str, problems: Problems) -> Any:
    """An object of the options class ``cls`` from a mapping; nothing written means all defaults.

    ``line`` is that of the key, for what is missing. Returns None where mistakes were noted.
    """
    before = len(problems)
    if isinstance(node, Scalar) and node.empty:
        node = Mapping({}, line)
    if not isinstance(node, Mapping):
        problems.add(node.line, where, f"expected keys with values, found {shown(node)}")
        return None
    known = {field.name: field for field in fields(cls)}
    values = {}
    for name, entry in node.entries.items():
        if name not in known:
            problems.add(entry.line, joined(where, name), f"no such key{nearest(name, known)}")
            continue
        declared = declaration(known[name])
        if isinstance(entry.value, Scalar) and entry.value.empty:
            if not required(known[name]):
                continue  # a key without a value is a key left out
            problems.add(
                entry.line,
                joined(where, name),
                f"expected {expectation(annotations(cls)[name], declared)}, found nothing",
            )
            continue
        values[name] = value(
            entry.value, annotations(cls)[name], declared, joined(where, name), problems
        )
    for name, field in known.items():
        if required(field) and name not in node.entries:
            expected = expectation(annotations(cls)[name], declaration(field))
            problems.add(
                line,
                where,
                f"{name} is missing ({declaration(field).help}); expected {expected}",
            )
    if len(problems) > before:
        return None
    try:
        return cls(**values)
    except ValueError as error:  # options that contradict each other say so in __post_init__
        problems.add(line, where, str(error))
        return None


def value(node: Node, annotation: Any, declared: Declared, where: str, problems: Problems) -> Any:
    """One value by its annotation; None where a mistake was noted."""
    annotation = stripped(annotation)
    if is_dataclass(annotation) and annotation is not Section:
        assert isinstance(annotation, type)
        return options(annotation, node, node.line, where, problems)
    if get_origin(annotation) is dict:
        return _named(node, get_args(annotation)[1], declared, where, problems)
    if get_origin(annotation) is tuple:
        return _listed(node, get_args(annotation), annotation, declared, where, problems)
    expected = expectation(annotation, declared)
    if not isinstance(node, Scalar):
        problems.add(node.line, where, f"expected {expected}, found {shown(node)}")
        return None
    try:
        return _scalar(node, annotation, declared)
    except _Unfit as unfit:
        hint = f"; {unfit}" if str(unfit) else ""
        problems.add(node.line, where, f"expected {expected}, found {shown(node)}{hint}")
        return None


def stripped(annotation: Any) -> Any:
    """The annotation without ``| None``."""
    if get_origin(annotation) in (Union, types.UnionType):
        return reduce(or_, (part for part in get_args(annotation) if part is not type(None)))
    return annotation


def expectation(annotation: Any, declared: Declared) -> str:
    """What a key takes, in words: ``"a whole number, 1 or more"``."""
    annotation = stripped(annotation)
    if declared.choices is not None and annotation is str:
        return alternatives(declared.choices)
    if annotation is Section:
        return 'a section "[x1:x2,y1:y2]"'
    if annotation == OUTPUT_SECTION:
        return 'a section "[x1:x2,y1:y2]" or header KEYWORD'
    if get_origin(annotation) is dict:
        return "names with values"
    if get_origin(annotation) is tuple:
        return _list_expectation(get_args(annotation), declared)
    if is_dataclass(annotation):
        return "keys with values"
    if annotation is bool:
        return "true or false"
    if annotation is str:
        return "text"
    unit = f" {declared.unit}" if declared.unit else ""
    if declared.unit:
        kind = f"a quantity in {declared.unit}"
    else:
        kind = "a whole number" if annotation is int else "a number"
    low, high = declared.minimum, declared.maximum
    if low is not None and high is not None:
        return f"{kind} from {low:g}{unit} to {high:g}{unit}"
    if low is not None:
        return f"{kind}, {low:g}{unit} or more"
    if high is not None:
        return f"{kind}, {high:g}{unit} or less"
    return kind


def _list_expectation(parts: tuple[Any, ...], declared: Declared) -> str:
    if parts[-1] is Ellipsis:
        return f"a list, each item {expectation(parts[0], declared)}"
    return f"a list of {len(parts)}, each item {expectation(parts[0], declared)}"


class _Unfit(ValueError):
    """A scalar that is not what its key takes; the message is a hint or empty."""


def _scalar(node: Scalar, annotation: Any, declared: Declared) -> Any:
    if annotation is Section or annotation == OUTPUT_SECTION:
        try:
            return section(node.text) if annotation is Section else output_section(node.text)
        except WrongSection as wrong:
            raise _Unfit(str(wrong)) from wrong
    if annotation is bool:
        return _flag(node)
    if annotation is str:
        return _text(node, declared)
    number: float
    if declared.unit is not None:
        try:
            number = quantity(node.text, declared.unit)
        except WrongQuantity as wrong:
            raise _Unfit(str(wrong)) from wrong
    else:
        number = _number(node, whole=annotation is int)
    if declared.minimum is not None and number < declared.minimum:
        raise _Unfit
    if declared.maximum is not None and number > declared.maximum:
        raise _Unfit
    return number


def _flag(node: Scalar) -> bool:
    if node.plain and node.text in ("true", "True", "TRUE", "false", "False", "FALSE"):
        return node.text.lower() == "true"
    if node.text.lower() in ("yes", "on", "no", "off", "true", "false"):
        word = "true" if node.text.lower() in ("yes", "on", "true") else "false"
        raise _Unfit(f"write {word}, without quotes")
    raise _Unfit


def _text(node: Scalar, declared: Declared) -> str:
    if declared.choices is not None and node.text not in declared.choices:
        close = difflib.get_close_matches(node.text[:60], declared.choices, 1)
        raise _Unfit(f"nearest is {close[0]}" if close else "")
    if not node.text.strip():
        raise _Unfit
    if not node.text.isprintable():
        raise _Unfit("keep to one line of printable characters")
    if len(node.text) > 1000:
        raise _Unfit("keep it below 1000 characters")
    return node.text


def _number(node: Scalar, *, whole: bool) -> float:
    if re.fullmatch(NUMBER, node.text) is None:
        raise _Unfit
    if not node.plain:
        raise _Unfit("take the quotes away")
    if not whole:
        number = float(node.text)
        if number in (float("inf"), float("-inf")):
            raise _Unfit
        return number
    if re.fullmatch("[+-]?(0|[1-9][0-9]{0,17})", node.text) is None:
        raise _Unfit
    return int(node.text)


def _named(
    node: Node, annotation: Any, declared: Declared, where: str, problems: Problems
) -> dict[str, Any] | None:
    if not isinstance(node, Mapping):
        problems.add(node.line, where, f"expected names with values, found {shown(node)}")
        return None
    read = {}
    for name, entry in node.entries.items():
        below = joined(where, name)
        if is_dataclass(annotation):
            assert isinstance(annotation, type)
            read[name] = options(annotation, entry.value, entry.line, below, problems)
        elif isinstance(entry.value, Scalar) and entry.value.empty:
            expected = expectation(annotation, declared)
            problems.add(entry.line, below, f"expected {expected}, found nothing")
        else:
            read[name] = value(entry.value, annotation, declared, below, problems)
    return read


def _listed(
    node: Node,
    parts: tuple[Any, ...],
    annotation: Any,
    declared: Declared,
    where: str,
    problems: Problems,
) -> tuple[Any, ...] | None:
    endless = parts[-1] is Ellipsis
    if not isinstance(node, Listing) or not (endless or len(node.items) == len(parts)):
        found = shown(node)
        if isinstance(node, Listing):
            found = f"a list of {len(node.items)}"
        problems.add(
            node.line, where, f"expected {expectation(annotation, declared)}, found {found}"
        )
        return None
    kinds = (parts[0],) * len(node.items) if endless else parts
    return tuple(
        value(item, kind, declared, f"{where}[{index}]", problems)
        for index, (item, kind) in enumerate(zip(node.items, kinds, strict=True), start=1)
    )
