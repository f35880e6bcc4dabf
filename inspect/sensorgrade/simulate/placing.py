"""Where a model's defects lie, and the true defect table."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sensorgrade.errors import RequestError
from sensorgrade.frames.geometry import Geometry, Output
from sensorgrade.recipe.model import Section
from sensorgrade.simulate.model import DefectModel

ATTEMPTS = 1000  # random places tried before the image counts as full

# The field that says how bad a defect of each kind is, and its unit.
STRENGTH = {
    "hot": ("current", "electron / s"),
    "warm": ("current", "electron / s"),
    "dead": ("response", "%"),
    "dim": ("response", "%"),
    "bright": ("response", "%"),
    "gain": ("response", "%"),
    "noisy": ("noise", "electron"),
    "telegraph": ("amplitude", "electron"),
    "stuck": ("code", "DN"),
    "nonlinear": ("curvature", "%"),
    "trap": ("capacity", "electron"),
}


@dataclass(frozen=True, slots=True)
class PlacedDefect:
    """One true defect: what it is, the pixels it covers in the assembled image, how bad it is.

    ``extent`` is pixel, column, row or cluster. ``value`` is in ``unit``: the dark current above
    the rest, the response over that of the rest, the noise, the step, the code.
    """

    kind: str
    extent: str
    section: Section
    value: float
    unit: str
    output: str
    model: DefectModel

    @property
    def name(self) -> str:
        """Kind and extent, such as ``"hot pixel"``."""
        return f"{self.kind} {self.extent}"


def placed_defects(
    models: tuple[DefectModel, ...], geometry: Geometry, rng: np.random.Generator
) -> tuple[PlacedDefect, ...]:
    """Every defect of the model with its place; random ones keep clear of all others.

    Raises
    ------
    RequestError
        A stated place leaves the image, there is no room left, or a strength is missing.
    """
    taken = np.zeros(geometry.shape, dtype=bool)
    found: dict[int, list[PlacedDefect]] = {}
    # Stated places first, so that random ones avoid them.
    order = sorted(range(len(models)), key=lambda at: models[at].row is None)
    for at in order:
        model = models[at]
        value, unit = _strength(at, model)
        found[at] = []
        if model.chance < 100 and 100 * rng.random() >= model.chance:
            continue
        for _ in range(model.count):
            section, output = _place(at, model, geometry, taken, rng)
            taken[_grown(section)] = True
            found[at].append(
                PlacedDefect(
                    kind=model.kind,
                    extent=_extent(section, model),
                    section=section,
                    value=value,
                    unit=unit,
                    output=output.name,
                    model=model,
                )
            )
    return tuple(defect for at in range(len(models)) for defect in found[at])


def _strength(at: int, model: DefectModel) -> tuple[float, str]:
    """The number that says how bad the defect is, and its unit."""
    field, unit = STRENGTH[model.kind]
    value = getattr(model, field)
    if model.kind == "telegraph" and model.amplitude == 0:
        field, unit, value = "current", "electron / s", model.current
    if model.kind == "dead" and value is None:
        value = 0.0
    if value is None or (value == 0 and field not in ("response", "code")):
        raise RequestError(f"defects[{at}].{field}: a {model.kind} defect needs it; give a value")
    return float(value), unit


def _place(
    at: int,
    model: DefectModel,
    geometry: Geometry,
    taken: NDArray[np.bool_],
    rng: np.random.Generator,
) -> tuple[Section, Output]:
    """The stated place, or the first random one that is free."""
    rows, columns = geometry.shape
    stated = model.row is not None and model.column is not None
    for _ in range(1 if stated else ATTEMPTS):
        row = int(rng.integers(rows)) if model.row is None else model.row
        column = int(rng.integers(columns)) if model.column is None else model.column
        if row >= rows or column >= columns:
            raise RequestError(
                f"defects[{at}]: row {row}, column {column} leaves the image of {rows} x {columns}"
                " (rows x columns)"
            )
        output = output_at(geometry, row, column)
        section = _covered(model, output, row, column)
        if stated or (section is not None and not taken[section.slices].any()):
            if section is None:
                raise RequestError(f"defects[{at}]: reaches beyond its output; make it smaller")
            return section, output
    raise RequestError(f"defects[{at}].count: no free place left after {ATTEMPTS} attempts")


def output_at(geometry: Geometry, row: int, column: int) -> Output:
    """The output that reads this pixel of the assembled image."""
    for output in geometry.outputs:
        place = output.place
        if (
            place.row_start <= row < place.row_stop
            and place.column_start <= column < place.column_stop
        ):
            return output
    raise RequestError(f"no output reads row {row}, column {column}")


def _covered(model: DefectModel, output: Output, row: int, column: int) -> Section | None:
    """The pixels covered from (row, column) on, None if they leave the output."""
    place = output.place
    top, right = output.corner.startswith("top"), output.corner.endswith("right")
    rows = _span(
        row, model.height, place.row_start, place.row_stop, reverse=top, whole=model.row is None
    )
    columns = _span(
        column,
        model.width,
        place.column_start,
        place.column_stop,
        reverse=right,
        whole=model.column is None,
    )
    if rows[1] > place.row_stop or columns[1] > place.column_stop:
        return None
    return Section(*rows, *columns)


def _span(
    first: int, size: int, start: int, stop: int, *, reverse: bool, whole: bool
) -> tuple[int, int]:
    """Half-open span from ``first`` on; size 0 reaches to the side that is read last."""
    if size:
        return first, first + size
    if whole:
        return start, stop
    return (start, first + 1) if reverse else (first, stop)


def _grown(section: Section) -> tuple[slice, slice]:
    """The section with a border of one pixel."""
    return (
        slice(max(section.row_start - 1, 0), section.row_stop + 1),
        slice(max(section.column_start - 1, 0), section.column_stop + 1),
    )


def _extent(section: Section, model: DefectModel) -> str:
    if section.shape == (1, 1):
        return "pixel"
    if model.height == 0 or (model.width == 1 and model.height > 1):
        return "column"
    if model.width == 0 or model.height == 1:
        return "row"
    return "cluster"
