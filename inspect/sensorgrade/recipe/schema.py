"""The JSON Schema of recipes, from the same declarations that the reader checks against.

Editors use it to complete and to explain keys. It says everything that can be said of one value
where it stands; what only several values together can get wrong, the reader says.
"""

from dataclasses import fields, is_dataclass
from typing import Any, get_args, get_origin

from sensorgrade.options import Declared
from sensorgrade.recipe.declared import (
    OUTPUT_SECTION,
    annotations,
    declaration,
    required,
    stripped,
)
from sensorgrade.recipe.limits import LimitOptions
from sensorgrade.recipe.load import REQUIRED, TOP, WORDS
from sensorgrade.recipe.model import DecisionRule, FrameRules, LotPlan, Section, Sensor, Zone
from sensorgrade.recipe.quantities import NUMBER, example
from sensorgrade.recipe.section import HEADER_PATTERN, PATTERN
from sensorgrade.recipe.vocabulary import Vocabulary

DIALECT = "https://json-schema.org/draft/2020-12/schema"
LIMIT = rf"^\s*((<=|>=|≤|≥)\s*{NUMBER}|{NUMBER}[^.]*\.\.\s*{NUMBER})"


def json_schema(vocabulary: Vocabulary) -> dict[str, Any]:
    """The schema of every recipe that this vocabulary allows, in draft 2020-12."""
    parts = {
        "name": {"type": "string", "minLength": 1},
        "sensor": _options(Sensor),
        "frames": _options(FrameRules),
        "stages": _closed(
            {name: _optional(_options(cls)) for name, cls in vocabulary.stages.items()}
        ),
        "zones": {"type": "object", "additionalProperties": _options(Zone)},
        "lot": _options(LotPlan),
        "decision": _options(DecisionRule),
        "grades": {"type": "object", "additionalProperties": _limits(vocabulary)},
    }
    parts["frames"]["properties"]["kinds"]["additionalProperties"] = {"enum": list(WORDS)}
    for name in ("frames", "stages", "lot", "decision"):
        parts[name] = _optional(parts[name])
    return {
        "$schema": DIALECT,
        "title": "sensorgrade recipe",
        "type": "object",
        "additionalProperties": False,
        "required": list(REQUIRED),
        "properties": {
            name: {"description": meaning, **parts[name]} for name, meaning in TOP.items()
        },
        "$defs": {"limit": _options(LimitOptions)},
    }


def _closed(properties: dict[str, Any], needed: tuple[str, ...] = ()) -> dict[str, Any]:
    closed = {"type": "object", "additionalProperties": False, "properties": properties}
    return closed | ({"required": list(needed)} if needed else {})


def _optional(schema: dict[str, Any]) -> dict[str, Any]:
    """The same, or nothing written after the colon."""
    kinds = schema["type"] if isinstance(schema.get("type"), list) else [schema.get("type")]
    if "enum" in schema:
        return schema | {"enum": [*schema["enum"], None]}
    return schema | {"type": [*kinds, "null"]}


def _options(cls: type) -> dict[str, Any]:
    """The schema of one options class."""
    properties = {}
    needed = []
    for field in fields(cls):
        declared = declaration(field)
        schema = _value(annotations(cls)[field.name], declared)
        if required(field):
            needed.append(field.name)
        else:
            schema = _optional(schema)
        properties[field.name] = {"description": _described(field, declared), **schema}
    return _closed(properties, tuple(needed))


def _described(field: Any, declared: Declared) -> str:
    """The field's help with unit and default."""
    text = declared.help + (f" [{declared.unit}]" if declared.unit else "")
    if isinstance(field.default, bool):
        return f"{text}. Default: {'true' if field.default else 'false'}"
    if isinstance(field.default, int | float):
        number = f"{field.default:g} {declared.unit or ''}".strip()
        return f"{text}. Default: {number}"
    if isinstance(field.default, str):
        return f"{text}. Default: {field.default}"
    return text


def _value(annotation: Any, declared: Declared) -> dict[str, Any]:
    """The schema of one value by its annotation."""
    annotation = stripped(annotation)
    origin = get_origin(annotation)
    if annotation is Section:
        return {"type": "string", "pattern": f"^{PATTERN}$"}
    if annotation == OUTPUT_SECTION:
        return {"type": "string", "pattern": f"^({PATTERN}|{HEADER_PATTERN})$"}
    if is_dataclass(annotation):
        assert isinstance(annotation, type)
        return _options(annotation)
    if origin is dict:
        inner = _value(get_args(annotation)[1], declared)
        return {"type": "object", "additionalProperties": inner}
    if origin is tuple:
        return _list(get_args(annotation), declared)
    if annotation is bool:
        return {"type": "boolean"}
    if annotation is str:
        if declared.choices is not None:
            return {"enum": list(declared.choices)}
        return {"type": ["string", "number"], "minLength": 1}
    if declared.unit is not None:
        return _quantity(declared)
    schema: dict[str, Any] = {"type": "integer" if annotation is int else "number"}
    if declared.minimum is not None:
        schema["minimum"] = declared.minimum
    if declared.maximum is not None:
        schema["maximum"] = declared.maximum
    return schema


def _quantity(declared: Declared) -> dict[str, Any]:
    assert declared.unit is not None
    if declared.unit == "":
        return {"type": ["string", "number"], "pattern": f"^{NUMBER}$"}
    return {
        "type": "string",
        "pattern": rf"^\s*{NUMBER}\s*[A-Za-z%°µμ/].*$",
        "examples": [example(declared.unit)],
    }


def _list(parts: tuple[Any, ...], declared: Declared) -> dict[str, Any]:
    items = _value(parts[0], declared)
    if parts[-1] is Ellipsis:
        return {"type": "array", "items": items}
    return {"type": "array", "items": items, "minItems": len(parts), "maxItems": len(parts)}


def _limits(vocabulary: Vocabulary) -> dict[str, Any]:
    """The schema of one grade."""
    properties = {}
    for name in (*vocabulary.quantities, *vocabulary.counts):
        unit = vocabulary.quantities.get(name, "")
        meaning = vocabulary.meanings.get(name, name.replace("_", " "))
        ending = r"\s*[A-Za-z%°µμ(/].*$" if unit else r"\s*$"
        text = {"type": "string", "pattern": LIMIT + ending}
        one = {"anyOf": [text, {"$ref": "#/$defs/limit"}]}
        properties[name] = {
            "description": f"{meaning}{f' [{unit}]' if unit else ''}",
            "anyOf": [*one["anyOf"], {"type": "array", "items": one}],
        }
    return _closed(properties)
