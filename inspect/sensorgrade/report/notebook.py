"""A result as a notebook shows it: grade, reason, measurements and counts in one small table."""

from html import escape

from sensorgrade.lot.result import DeviceResult
from sensorgrade.wording import doubt_text, name_text

WORDS = {"accept": "accepted", "reject": "rejected"}


def notebook_html(result: DeviceResult) -> str:
    """HTML of one result; text from headers and file names is escaped."""
    graded = result.graded
    grade = f", grade {graded.grade}" if graded.grade else ""
    reasons = "".join(f"<li>{escape(reason)}</li>" for reason in graded.reasons)
    measured = [
        (name_text(one.name), one.scope, doubt_text(one.value, one.standard_uncertainty, one.unit))
        for one in result.measurements
    ]
    counted = [(name_text(one.kind), one.scope, str(one.found)) for one in result.defects]
    rows = "".join(
        "<tr>"
        + "".join(f"<td style='text-align: left'>{escape(cell)}</td>" for cell in row)
        + "</tr>"
        for row in (*measured, *counted)
    )
    return (
        f"<p><strong>{escape(result.serial)}</strong>:"
        f" {escape(WORDS.get(graded.decision, graded.decision) + grade)}</p>"
        f"<ul>{reasons}</ul><table><tbody>{rows}</tbody></table>"
    )
