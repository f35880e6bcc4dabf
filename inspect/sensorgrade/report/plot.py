"""What a plot shows, apart from how it is drawn: the page and the figure files draw the same."""

from dataclasses import dataclass
from typing import Any, Literal

from numpy.typing import NDArray


@dataclass(frozen=True, slots=True, kw_only=True)
class Axis:
    """One axis; ``label`` ends with the unit in brackets. ``low``, ``high`` None: by the data."""

    label: str
    log: bool = False
    low: float | None = None
    high: float | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Series:
    """One set of points (K,) or one line through them.

    ``colour`` is an index into the palette, so that what belongs together looks alike.
    ``y_error`` are standard uncertainties, drawn as one of them up and down. ``"steps"`` draws
    K + 1 edges ``x`` with K heights ``y``.
    """

    label: str
    x: NDArray[Any]
    y: NDArray[Any]
    draw: Literal["points", "line", "dashes", "steps"] = "points"
    colour: int = 0
    y_error: NDArray[Any] | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Mark:
    """A labelled straight line across the plot, at ``x`` or at ``y``."""

    label: str
    x: float | None = None
    y: float | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Plot:
    """A plot with its words.

    ``key`` names it in files and links. ``caption`` says what to look for, ``alt`` what a person
    who cannot see the plot must know. ``lower`` is a second panel on the same x axis, such as
    the residuals; empty for none.
    """

    key: str
    title: str
    caption: str
    alt: str
    x: Axis
    y: Axis
    series: tuple[Series, ...]
    marks: tuple[Mark, ...] = ()
    lower: tuple[Series, ...] = ()
    lower_y: Axis | None = None
