"""result.json: one device's result as text that a person can read and a program can trust."""

import json
from collections.abc import Iterator
from dataclasses import fields
from typing import Any

from sensorgrade.defects.defect import DefectCount
from sensorgrade.errors import RequestError
from sensorgrade.grading.decision import Graded, LimitResult
from sensorgrade.lot.result import DeviceResult, InputFile, Provenance
from sensorgrade.measurement import Finding, Measurement
from sensorgrade.recipe.model import Limit


def result_json(result: DeviceResult) -> str:
    """The text of result.json; equal results give equal bytes.

    Floats are written with the fewest digits that read back as the same number. ``defects``
    maps each kind to the number found on the whole device; ``defect_counts`` has every scope,
    with the expected number and its doubt. A record stands on one line.
    """
    document: dict[str, Any] = {
        "serial": result.serial,
        "folder": result.folder,
        "lot": result.lot,
        "wafer": result.wafer,
        "die_row": result.die_row,
        "die_column": result.die_column,
        "taken": result.taken,
        "grade": {
            "grade": result.graded.grade,
            "decision": result.graded.decision,
            "reasons": list(result.graded.reasons),
            "limits": [
                _record(limit) | {"limit": _record(limit.limit)} for limit in result.graded.limits
            ],
        },
        "measurements": [_record(each) for each in result.measurements],
        "defects": {count.kind: count.found for count in result.defects if count.scope == "device"},
        "defect_counts": [_record(count) for count in result.defects],
        "findings": [_record(finding) for finding in result.findings],
        "not_measured": dict(result.not_measured),
        "provenance": {
            "recipe": result.provenance.recipe,
            "recipe_sha256": result.provenance.recipe_sha256,
            "versions": dict(result.provenance.versions),
            "inputs": [_record(file) for file in result.provenance.inputs],
        },
    }
    return "".join(_lines(document, "")) + "\n"


def read_result(text: str) -> DeviceResult:
    """The result that `result_json` wrote.

    Raises
    ------
    RequestError
        The text is not a result: not JSON, or a key is missing.
    """
    try:
        document = json.loads(text)
        graded, provenance = document["grade"], document["provenance"]
        return DeviceResult(
            serial=document["serial"],
            folder=document["folder"],
            lot=document["lot"],
            wafer=document["wafer"],
            die_row=document["die_row"],
            die_column=document["die_column"],
            taken=document["taken"],
            findings=tuple(
                Finding(**(finding | {"undecides": tuple(finding["undecides"])}))
                for finding in document["findings"]
            ),
            measurements=tuple(Measurement(**each) for each in document["measurements"]),
            defects=tuple(DefectCount(**count) for count in document["defect_counts"]),
            not_measured=document["not_measured"],
            graded=Graded(
                grade=graded["grade"],
                decision=graded["decision"],
                reasons=tuple(graded["reasons"]),
                limits=tuple(
                    LimitResult(**(limit | {"limit": Limit(**limit["limit"])}))
                    for limit in graded["limits"]
                ),
            ),
            provenance=Provenance(
                recipe=provenance["recipe"],
                recipe_sha256=provenance["recipe_sha256"],
                inputs=tuple(InputFile(**file) for file in provenance["inputs"]),
                versions=provenance["versions"],
            ),
        )
    except (ValueError, KeyError, TypeError) as error:
        raise RequestError(
            f"not a result.json of this program ({type(error).__name__}: {error}); inspect the"
            " device again"
        ) from error


def _record(item: Any) -> dict[str, Any]:
    """A dataclass's own fields, in their order; a tuple becomes a list on the way to text."""
    return {field.name: getattr(item, field.name) for field in fields(item)}


def _lines(value: Any, indent: str) -> Iterator[str]:
    """JSON with objects and lists spread out, but a list's own records on one line each."""
    deeper = indent + "  "
    if isinstance(value, dict) and value:
        opening, closing = "{", "}"
        items = [(f"{_text(key)}: ", _lines(entry, deeper)) for key, entry in value.items()]
    elif isinstance(value, list) and value:
        opening, closing = "[", "]"
        items = [("", iter([_text(entry)])) for entry in value]
    else:
        yield _text(value)
        return
    yield opening
    for number, (label, parts) in enumerate(items):
        yield f"{',' if number else ''}\n{deeper}{label}"
        yield from parts
    yield f"\n{indent}{closing}"


def _text(value: Any) -> str:
    """One value as JSON; NaN and infinity are refused, as JSON has no such numbers."""
    return json.dumps(value, ensure_ascii=False, allow_nan=False)
