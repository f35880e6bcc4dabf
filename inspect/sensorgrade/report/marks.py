"""How each kind of defect is marked on the pictures: a shape and a colour of its own."""

from collections.abc import Iterable
from dataclasses import dataclass

# SVG path data about (0, 0), within 6 units; drawn by the page's script and in its legend.
SHAPES = {
    "circle": "M-5 0a5 5 0 1 0 10 0a5 5 0 1 0-10 0z",
    "square": "M-4.5-4.5h9v9h-9z",
    "diamond": "M0-6l6 6l-6 6l-6-6z",
    "triangle": "M0-5.5l5.5 9.5h-11z",
    "inverted": "M0 5.5l5.5-9.5h-11z",
    "cross": "M-4.5-4.5l9 9m0-9l-9 9",
    "plus": "M-6 0h12m-6-6v12",
    "hourglass": "M-5-5h10l-10 10h10z",
}
# Light colours that stand apart on grey for every common form of colour vision
COLOURS = ("#7cd4ff", "#ffb100", "#ff8a5c", "#fff27a", "#ffb3e2", "#5ce6b0")


@dataclass(frozen=True, slots=True)
class KindMark:
    """The mark of one kind, with how many of it there are in the table."""

    kind: str
    count: int
    path: str
    colour: str


def kind_marks(kinds: Iterable[str], counts: dict[str, int]) -> tuple[KindMark, ...]:
    """A mark for each kind, in the order given; no two of 24 kinds share shape and colour."""
    shapes = list(SHAPES.values())
    return tuple(
        KindMark(kind, counts[kind], shapes[index % len(shapes)], COLOURS[index % len(COLOURS)])
        for index, kind in enumerate(kinds)
    )
