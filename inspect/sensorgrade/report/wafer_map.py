"""Wafers as drawings: every die at its place, a link to its page."""

from collections import defaultdict
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from html import escape

from markupsafe import Markup

from sensorgrade.lot.wafer import Die
from sensorgrade.report.lot_rows import STATES

STEP = 20.0  # drawing units from die to die
SIZE = 18.0
LARGEST = 1.6  # screen pixels that a drawing unit may take
RIM = 24.0  # room for the numbers of rows and columns
LARGE = 32  # dies across, above which a die has no room for its grade's number
GRADES = 4  # shades of accepted dies
STROKES = {
    "reject": "M4.5 4.5l9 9m0-9l-9 9",
    "undecided": "M4.5 9h9",
    "failed": "M9 4v6.5m0 2.5v1.5",
    "ungraded": "",
}


@dataclass(frozen=True, slots=True)
class WaferDrawing:
    """One wafer: its name, its yield in words and the drawing."""

    wafer: str
    text: str
    drawing: Markup


def wafer_drawings(
    dies: Sequence[Die],
    *,
    grades: Sequence[str],
    numbers: Mapping[str, int],
    links: Mapping[str, str],
) -> tuple[WaferDrawing, ...]:
    """Every wafer on the same grid, rows downwards and columns to the right.

    ``numbers`` are those of the devices in the page's data, ``links`` the addresses of their
    pages, both by serial.
    """
    wafers: defaultdict[str, list[Die]] = defaultdict(list)
    for die in dies:
        wafers[die.wafer].append(die)
    rows = min(die.row for die in dies), max(die.row for die in dies)
    columns = min(die.column for die in dies), max(die.column for die in dies)
    drawn = []
    for wafer, members in wafers.items():
        accepted = sum(die.accepted for die in members)
        text = f"{accepted} of {len(members)} accepted"
        parts = [_head(wafer, text, rows, columns)]
        parts += [
            _die(die, rows[0], columns[0], grades, numbers, links, rows[1] - rows[0] < LARGE)
            for die in members
        ]
        parts.append("</svg>")
        drawn.append(WaferDrawing(wafer, text, Markup("".join(parts))))
    return tuple(drawn)


def _head(wafer: str, text: str, rows: tuple[int, int], columns: tuple[int, int]) -> str:
    """The opening tag, the title and the numbers along the edges."""
    high = RIM + STEP * (rows[1] - rows[0] + 1)
    wide = RIM + STEP * (columns[1] - columns[0] + 1)
    stride = max(1, (max(rows[1] - rows[0], columns[1] - columns[0]) + 9) // 10)
    labels = [
        f'<text x="{RIM + STEP * (one - columns[0]) + SIZE / 2:g}" y="{RIM - 8:g}"'
        f' text-anchor="middle">{one}</text>'
        for one in range(columns[0], columns[1] + 1, stride)
    ] + [
        f'<text x="{RIM - 6:g}" y="{RIM + STEP * (one - rows[0]) + SIZE / 2 + 4:g}"'
        f' text-anchor="end">{one}</text>'
        for one in range(rows[0], rows[1] + 1, stride)
    ]
    return (
        f'<svg class="wafer-map" viewBox="0 0 {wide:g} {high:g}" role="group"'
        f' style="max-width:{LARGEST * wide:g}px"'
        f' aria-label="{escape(f"Wafer {wafer}: {text}. Each die is a link to its page.")}">'
        + "".join(labels)
    )


def _die(
    die: Die,
    first_row: int,
    first_column: int,
    grades: Sequence[str],
    numbers: Mapping[str, int],
    links: Mapping[str, str],
    roomy: bool,
) -> str:
    rank = grades.index(die.grade) if die.grade in grades else 0
    shade = f" g{min(rank, GRADES - 1)}" if die.accepted else ""
    state = f"grade {die.grade}" if die.grade is not None else STATES[die.decision]
    place = f"row {die.row}, column {die.column}"
    inner = f'<rect width="{SIZE:g}" height="{SIZE:g}" rx="1.5"/>'
    if die.accepted and roomy and len(grades) > 1:
        inner += f'<text x="9" y="13" text-anchor="middle">{rank + 1}</text>'
    elif not die.accepted and STROKES[die.decision]:
        inner += f'<path d="{STROKES[die.decision]}"/>'
    x = RIM + STEP * (die.column - first_column)
    y = RIM + STEP * (die.row - first_row)
    link = f' href="{escape(links[die.serial])}"' if die.serial in links else ""
    return (
        f'<a class="die {die.decision}{shade}"{link} data-device="{numbers[die.serial]}"'
        f' transform="translate({x:g} {y:g})">'
        f"<title>{escape(f'{die.serial}, {place}: {state}')}</title>{inner}</a>"
    )
