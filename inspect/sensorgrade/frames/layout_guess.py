"""A first guess at a sensor's layout from two images: one dark, one lit.

Nothing here is a measurement. Overscan stays dark in a lit frame; outputs have bias levels of
their own, so a step in the middle of the dark image parts them; filters of a mosaic repeat every
second pixel. Whoever drafts a recipe from it must check each guess.
"""

from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from sensorgrade.recipe.model import OutputOptions, Section

UNLIT = 0.3  # of the usual light: below it a row or column holds no pixels
LEAST_RUN = 2  # rows or columns; a single dark one is a defect
STEP = 8.0  # in units of the scatter of steps elsewhere
LEAST_STEP = 0.4  # DN in the dark image
COLOUR_CONTRAST = 0.04  # between phases of the 2 x 2 cell

Image = NDArray[np.float64]
Span = tuple[int, int]


@dataclass(frozen=True, slots=True)
class Part:
    """Rows or columns of one output: image pixels, and overscan and prescan beside them."""

    image: Span
    overscan: Span | None
    prescan: Span | None


@dataclass(frozen=True, slots=True)
class LayoutGuess:
    """``outputs`` is empty for one output without overscan. ``colour`` as in recipes."""

    outputs: dict[str, OutputOptions]
    colour: str


def guessed_layout(dark: Image | None, lit: Image | None) -> LayoutGuess:
    """Outputs, overscan and mosaic as the images suggest them.

    Parameters
    ----------
    dark, lit : ndarray of shape (M, N) [DN], or None
        Means of a few bias or dark frames, and of a few flats, raw. Without both, overscan
        cannot be told from image.
    """
    some = dark if dark is not None else lit
    if some is None:
        return LayoutGuess({}, "none")
    light = None if dark is None or lit is None else lit - dark
    columns = _parts(dark, lit, light, axis=0)
    rows = _parts(dark, lit, light, axis=1)
    whole = len(columns) == len(rows) == 1
    bare = all(part.overscan is None and part.prescan is None for part in (*columns, *rows))
    outputs = {} if whole and bare else _outputs(columns, rows)
    return LayoutGuess(outputs, "none" if light is None else _colour(light, columns, rows))


def _parts(
    dark: Image | None, lit: Image | None, light: Image | None, *, axis: int
) -> tuple[Part, ...]:
    """The parts along columns (axis 0, over which profiles are taken) or rows (axis 1)."""
    some = dark if dark is not None else lit
    assert some is not None
    length = some.shape[1 - axis]
    level = _profile(some, axis)
    lit_runs: list[Span] = [(0, length)]
    dark_runs: list[Span] = []
    if light is not None:
        profile = _profile(light, axis)
        usual = np.percentile(profile, 75)
        if usual > 0:
            lit_runs, dark_runs = _runs(profile > UNLIT * usual)
    images: list[Span] = []
    for start, stop in lit_runs:
        middle = (start + stop) // 2
        split = len(lit_runs) == 1 and dark is not None and _steps(level[start:stop])
        images += [(start, middle), (middle, stop)] if split else [(start, stop)]
    return _assigned(images, dark_runs, level)


def _profile(image: Image, axis: int) -> Image:
    """Median over the middle half of the other axis."""
    length = image.shape[axis]
    middle = np.take(image, range(length // 4, max(length - length // 4, length // 4 + 1)), axis)
    profile: Image = np.median(middle, axis=axis)
    return profile


def _runs(lit: NDArray[np.bool_]) -> tuple[list[Span], list[Span]]:
    """Runs of lit and of unlit positions; runs too short to be meant join their neighbours."""
    edges = [0, *(np.flatnonzero(lit[1:] != lit[:-1]) + 1).tolist(), len(lit)]
    joined: list[tuple[int, int, bool]] = []
    for start, stop in pairwise(edges):
        state = bool(lit[start])
        inside = start > 0 and stop < len(lit)
        if joined and (joined[-1][2] == state or (stop - start < LEAST_RUN and inside)):
            joined[-1] = (joined[-1][0], stop, joined[-1][2])
        else:
            joined.append((start, stop, state))
    return (
        [(start, stop) for start, stop, state in joined if state],
        [(start, stop) for start, stop, state in joined if not state],
    )


def _steps(level: Image) -> bool:
    """Whether the dark level steps in the middle as it does nowhere else."""
    width = max(4, min(16, len(level) // 16))
    if len(level) < 8 * width:
        return False
    windows = np.lib.stride_tricks.sliding_window_view(level, width)
    medians = np.median(windows, axis=1)  # no single hot column moves them
    steps = medians[width:] - medians[:-width]
    steps = steps - np.median(steps)  # a slope steps alike everywhere
    scatter = 1.4826 * np.median(np.abs(steps))
    at_middle = steps[len(level) // 2 - width]
    return bool(abs(at_middle) > max(STEP * scatter, LEAST_STEP))


def _assigned(images: list[Span], unlit: list[Span], level: Image) -> tuple[Part, ...]:
    """Each image part with the dark runs that are read by its output."""
    if len(images) == 1:
        before = [run for run in unlit if run[1] <= images[0][0]]
        after = [run for run in unlit if run[0] >= images[0][1]]
        first = before[0] if before else None
        last = after[-1] if after else None
        if first is not None and (last is None or _width(first) > _width(last)):
            return (Part(images[0], first, last),)
        return (Part(images[0], last, first),)
    if len(images) != 2:
        return tuple(Part(image, None, None) for image in images)
    overscans: list[Span | None] = [None, None]
    prescans: list[Span | None] = [None, None]
    for start, stop in unlit:
        middle = (start + stop) // 2
        if start >= images[0][1] and stop <= images[1][0]:  # between the parts: half each
            overscans = [(start, middle), (middle, stop)]
        elif len(unlit) == 1 and stop - start >= 2 * LEAST_RUN:  # all at one end: half each
            halves = [(start, middle), (middle, stop)]
            near = [np.median(level[slice(*half)]) for half in halves]
            own = [np.median(level[slice(*image)]) for image in images]
            straight = abs(near[0] - own[0]) + abs(near[1] - own[1])
            crossed = abs(near[0] - own[1]) + abs(near[1] - own[0])
            overscans = [*halves] if straight <= crossed else [*halves[::-1]]
        else:  # at both ends: each to its own
            side = 0 if stop <= images[0][0] else 1
            if overscans[side] is None:
                overscans[side] = (start, stop)
            else:
                prescans[side] = (start, stop)
    return tuple(Part(*one) for one in zip(images, overscans, prescans, strict=True))


def _width(span: Span) -> int:
    return span[1] - span[0]


def _outputs(columns: tuple[Part, ...], rows: tuple[Part, ...]) -> dict[str, OutputOptions]:
    """One output for each part of the columns in each part of the rows."""
    across = _names(len(columns), "left", "right")
    along = _names(len(rows), "bottom", "top")
    outputs = {}
    for row, row_name in zip(rows, along, strict=True):
        for column, column_name in zip(columns, across, strict=True):
            name = " ".join(filter(None, (row_name, column_name))) or "main"
            side = "right" if column_name == "right" else "left"
            outputs[name] = OutputOptions(
                image=Section(*row.image, *column.image),
                overscan=None if column.overscan is None else Section(*row.image, *column.overscan),
                parallel_overscan=(
                    None if row.overscan is None else Section(*row.overscan, *column.image)
                ),
                prescan=None if column.prescan is None else Section(*row.image, *column.prescan),
                corner=f"{'top' if row_name == 'top' else 'bottom'} {side}",
            )
    return outputs


def _names(count: int, first: str, second: str) -> list[str]:
    if count == 1:
        return [""]
    return [first, second] if count == 2 else [f"part {index + 1}" for index in range(count)]


def _colour(light: Image, columns: tuple[Part, ...], rows: tuple[Part, ...]) -> str:
    """The mosaic whose greens lie where two phases of the cell are alike; none without contrast.

    Red and blue cannot be told apart by a lamp of unknown colour: red is put where the light is
    stronger, as it is under a warm lamp.
    """
    part = light[slice(*rows[0].image), slice(*columns[0].image)]
    part = part[len(part) // 4 :, part.shape[1] // 4 :]
    part = part[: len(part) // 4 * 2, : part.shape[1] // 4 * 2]
    if part.size == 0 or not part.any():
        return "none"
    phases = np.array([[np.median(part[row::2, column::2]) for column in (0, 1)] for row in (0, 1)])
    mean = phases.mean()
    if mean <= 0 or np.ptp(phases) / mean < COLOUR_CONTRAST:
        return "none"
    # Bring the image's cell to the frame's: phases count from the assembled image's corner.
    phases = np.roll(phases, (-(_quarter(rows[0])), -(_quarter(columns[0]))), (0, 1))
    falling = abs(phases[0, 0] - phases[1, 1])
    rising = abs(phases[0, 1] - phases[1, 0])
    if rising < falling:
        return "RGGB" if phases[0, 0] > phases[1, 1] else "BGGR"
    return "GRBG" if phases[0, 1] > phases[1, 0] else "GBRG"


def _quarter(part: Part) -> int:
    """Rows or columns from the assembled image's corner to the quarter that `_colour` looks at."""
    return (part.image[1] - part.image[0]) // 4 % 2
