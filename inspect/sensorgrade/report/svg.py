"""Plots as small inline SVG: drawn in the page's own colours, so that light, dark and print fit."""

from collections.abc import Iterator
from html import escape

import numpy as np
from numpy.typing import NDArray

from sensorgrade.report.plot import Axis, Mark, Plot, Series
from sensorgrade.report.scale import Scale, scale

WIDTH = 440.0
LEFT, RIGHT, TOP, BOTTOM = 68.0, 12.0, 10.0, 46.0
UPPER = 200.0  # height of the main panel
LOWER = 70.0  # height of the second panel
GAP = 16.0
LEGEND_LINE = 17.0
CHARACTER = 6.9  # mean width of one, to keep labels apart
X_TICKS = 6  # at most about so many
PALETTE = 6  # colours s0 … s5 of the style sheet
MANY = 100  # points of a line, from which it is drawn finer
MOST_POINTS = 1500  # a thinned cloud of points looks the same


def svg(plot: Plot) -> str:
    """The plot as one ``<svg>`` element; all text is escaped.

    Colours are classes ``s0`` … ``s5`` of the page, each with its own shape of point, so that no
    meaning hangs on colour alone.
    """
    x_scale = scale(plot.x, plot.series + plot.lower, "x")
    legend = _legend(plot)
    head = TOP + LEGEND_LINE * len(legend)
    below = head + UPPER + (GAP + LOWER if plot.lower else 0.0)
    height = below + BOTTOM
    parts = [
        f'<svg class="plot" viewBox="0 0 {WIDTH:g} {height:g}" role="img"'
        f' aria-labelledby="{escape(plot.key)}-alt">'
        f'<title id="{escape(plot.key)}-alt">{escape(plot.alt)}</title>'
    ]
    parts += [line for row, line_parts in enumerate(legend) for line in _place(line_parts, row)]
    parts += _panel(plot.series, plot.marks, plot.y, x_scale, head, UPPER, ticks=6)
    if plot.lower and plot.lower_y is not None:
        top = head + UPPER + GAP
        parts += _panel(plot.lower, (), plot.lower_y, x_scale, top, LOWER, ticks=3)
    parts += _x_axis(plot.x, x_scale, below)
    parts.append("</svg>")
    return "".join(parts)


def _panel(
    series: tuple[Series, ...],
    marks: tuple[Mark, ...],
    axis: Axis,
    x_scale: Scale,
    top: float,
    height: float,
    *,
    ticks: int,
) -> Iterator[str]:
    """Grid, y axis, marks and series of one panel."""
    y_scale = scale(axis, series, "y")
    right = WIDTH - RIGHT
    for value, text in y_scale.ticks(ticks):
        y = top + height * (1 - y_scale.place(np.array(value)))
        yield f'<path class="grid" d="M{LEFT:g} {y:.1f}H{right:g}"/>'
        yield f'<text class="tick" x="{LEFT - 6:g}" y="{y + 4:.1f}" text-anchor="end">{text}</text>'
    yield f'<path class="axis" d="M{LEFT:g} {top:g}V{top + height:g}H{right:g}"/>'
    label = y_scale.label(axis.label, ticks)
    yield (
        f'<text class="label" transform="translate(13 {top + height / 2:.1f}) rotate(-90)"'
        f' text-anchor="middle">{escape(label)}</text>'
    )
    for one in series:
        yield from _series(one, x_scale, y_scale, top, height)
    yield from _uprights([one for one in marks if one.x is not None], series, x_scale, y_scale, top)
    for mark in marks:
        level = float(y_scale.place(np.array(np.nan if mark.y is None else mark.y)))
        if 0 <= level <= 1:
            at = top + height * (1 - level)
            yield f'<path class="mark" d="M{LEFT:g} {at:.1f}H{right:g}"/>'
            yield (
                f'<text class="marked" x="{right - 3:g}" y="{at - 4:.1f}"'
                f' text-anchor="end">{escape(mark.label)}</text>'
            )


def _uprights(
    marks: list[Mark],
    series: tuple[Series, ...],
    x_scale: Scale,
    y_scale: Scale,
    top: float,
) -> Iterator[str]:
    """Marks at an x; labels stand on three lines in turn, at the end where fewer points are."""
    labels: dict[float, list[str]] = {}
    for mark in marks:
        place = float(x_scale.place(np.array(mark.x)))
        if 0 <= place <= 1:
            labels.setdefault(round(LEFT + (WIDTH - LEFT - RIGHT) * place, 1), []).append(
                mark.label
            )
    yield from (f'<path class="mark" d="M{x:g} {top:g}V{top + UPPER:g}"/>' for x in labels)
    dots = [one for one in series if one.draw == "points"]
    px, py = _pixels(
        np.concatenate([np.empty(0), *(x_scale.place(np.asarray(one.x, float)) for one in dots)]),
        np.concatenate([np.empty(0), *(y_scale.place(np.asarray(one.y, float)) for one in dots)]),
        top,
        UPPER,
    )
    for line, (x, names) in enumerate(labels.items()):
        text = ", ".join(dict.fromkeys(names))
        wide = CHARACTER * len(text)
        late = x + wide > WIDTH - RIGHT
        covered = (px > x - wide) & (px < x) if late else (px > x) & (px < x + wide)
        above = np.count_nonzero(covered & (py < top + UPPER / 3))
        below = np.count_nonzero(covered & (py > top + UPPER * 2 / 3))
        y = top + 11 + 15 * (line % 3) if above <= below else top + UPPER - 8 - 15 * (line % 3)
        yield (
            f'<text class="marked" x="{x + (-4 if late else 4):.1f}" y="{y:g}"'
            f' text-anchor="{"end" if late else "start"}">{escape(text)}</text>'
        )


def _series(
    one: Series, x_scale: Scale, y_scale: Scale, top: float, height: float
) -> Iterator[str]:
    """The series as one path; points past the axis ends are left out, lines are cut there."""
    x = np.asarray(one.x, dtype=np.float64)
    y = np.asarray(one.y, dtype=np.float64)
    error = one.y_error
    if one.draw == "steps":
        x, y = np.repeat(x, 2)[1:-1], np.repeat(y, 2)
        y = np.where(y > 0, y, y_scale.low) if y_scale.log else y
    elif one.draw == "points" and x.size > MOST_POINTS:
        keep = np.linspace(0, x.size - 1, MOST_POINTS).astype(int)
        x, y = x[keep], y[keep]
        error = None if error is None else error[keep]
    across = x_scale.place(x)
    up = y_scale.place(y)
    inside = np.isfinite(across) & np.isfinite(up) & (across > -0.001) & (across < 1.001)
    px, py = _pixels(across, np.clip(up, 0, 1), top, height)
    colour = f"s{one.colour % PALETTE}"
    if one.draw == "points":
        inside &= (up > -0.001) & (up < 1.001)
        shape = POINTS[one.colour % PALETTE] if inside.sum() <= 200 else POINTS_SMALL
        if error is not None:
            low = np.clip(y_scale.place(y - error), 0, 1)
            high = np.clip(y_scale.place(y + error), 0, 1)
            _, bottom = _pixels(across, np.nan_to_num(low), top, height)
            _, above = _pixels(across, high, top, height)
            bars = "".join(
                f"M{a:.1f} {b:.1f}V{c:.1f}"
                for a, b, c in zip(px[inside], bottom[inside], above[inside], strict=True)
                if abs(b - c) > 2
            )
            if bars:
                yield f'<path class="line {colour}" d="{bars}"/>'
        d = "".join(f"M{a:.1f} {b:.1f}{shape}" for a, b in zip(px[inside], py[inside], strict=True))
        yield f'<path class="points {colour}" d="{d}"/>'
        return
    look = " dashes" if one.draw == "dashes" else " fine" if x.size > MANY else ""
    yield f'<path class="line {colour}{look}" d="{_polyline(px, py, inside)}"/>'


def _pixels(
    across: NDArray[np.float64], up: NDArray[np.float64], top: float, height: float
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    return LEFT + (WIDTH - LEFT - RIGHT) * across, top + height * (1 - up)


def _polyline(px: NDArray[np.float64], py: NDArray[np.float64], inside: NDArray[np.bool_]) -> str:
    """Path data with a new start after every gap."""
    d = []
    pen = "M"
    for a, b, drawn in zip(px.tolist(), py.tolist(), inside.tolist(), strict=True):
        if drawn:
            d.append(f"{pen}{a:.1f} {b:.1f}")
            pen = "L"
        else:
            pen = "M"
    return "".join(d)


# Relative path of one point, about its centre: circle, square, diamond, triangle, cross, plus
POINTS = (
    "m-2.6 0a2.6 2.6 0 1 0 5.2 0a2.6 2.6 0 1 0-5.2 0z",
    "m-2.4-2.4h4.8v4.8h-4.8z",
    "m0-3.4l3.4 3.4l-3.4 3.4l-3.4-3.4z",
    "m0-3.2l3.2 5.4h-6.4z",
    "m-2.6-2.6l5.2 5.2m0-5.2l-5.2 5.2",
    "m-3.2 0h6.4m-3.2-3.2v6.4",
)
POINTS_SMALL = "m-.9-.9h1.8v1.8h-1.8z"


def _x_axis(axis: Axis, x_scale: Scale, base: float) -> Iterator[str]:
    width = WIDTH - LEFT - RIGHT
    for value, text in x_scale.ticks(X_TICKS):
        x = LEFT + width * float(x_scale.place(np.array(value)))
        yield f'<path class="axis" d="M{x:.1f} {base:g}v4"/>'
        yield f'<text class="tick" x="{x:.1f}" y="{base + 17:g}" text-anchor="middle">{text}</text>'
    yield (
        f'<text class="label" x="{LEFT + width / 2:g}" y="{base + 38:g}"'
        f' text-anchor="middle">{escape(x_scale.label(axis.label, X_TICKS))}</text>'
    )


def _legend(plot: Plot) -> list[list[tuple[Series, float]]]:
    """Labelled series put in lines, each with its x; empty for a single one."""
    named = [one for one in plot.series if one.label]
    if len(named) < 2:
        return []
    lines: list[list[tuple[Series, float]]] = [[]]
    x = LEFT
    for one in named:
        width = 26 + CHARACTER * len(one.label)
        if lines[-1] and x + width > WIDTH - RIGHT:
            lines.append([])
            x = LEFT
        lines[-1].append((one, x))
        x += width + 8
    return lines


def _place(entries: list[tuple[Series, float]], row: int) -> Iterator[str]:
    """One line of the legend."""
    y = TOP + LEGEND_LINE * row + 4
    for one, x in entries:
        colour = one.colour % PALETTE
        if one.draw == "points":
            yield f'<path class="points s{colour}" d="M{x + 8:g} {y:g}{POINTS[colour]}"/>'
        else:
            dashes = " dashes" if one.draw == "dashes" else ""
            yield f'<path class="line s{colour}{dashes}" d="M{x:g} {y:g}h16"/>'
        yield f'<text class="key" x="{x + 21:g}" y="{y + 4:g}">{escape(one.label)}</text>'
