"""Where each output's pixels lie in the raw frame and in the assembled image.

The assembled image is what masters, masks and defects are given in: the image sections of all
outputs in the raw frame's own pixel order, overscan and prescan taken out.
"""

from collections.abc import Mapping
from dataclasses import dataclass

from sensorgrade.errors import RequestError
from sensorgrade.recipe.model import HeaderSection, OutputOptions, Section, Sensor

CELL = {"R": "colour red", "B": "colour blue"}


@dataclass(frozen=True, slots=True)
class Output:
    """One amplifier's sections; all but ``place`` (assembled) are in raw coordinates.

    ``extension`` is the key of the plane in ``Frame.planes``. ``corner`` is where readout
    starts, in FITS display (row index 0 is the bottom).
    """

    name: str
    extension: str
    image: Section
    overscan: Section | None
    parallel_overscan: Section | None
    prescan: Section | None
    place: Section
    corner: str

    def transfers(self) -> tuple[int, int]:
        """(parallel, serial) pixel transfers of the pixel farthest from the readout corner."""
        prescan = 0 if self.prescan is None else self.prescan.shape[1]
        return self.image.shape[0], self.image.shape[1] + prescan


@dataclass(frozen=True, slots=True)
class Region:
    """The pixels that one measurement speaks for: an output, or one colour plane of it.

    ``rows`` and ``columns`` index the assembled image (with step 2 for a colour plane).
    ``scope`` is the text that measurements carry.
    """

    scope: str
    output: str
    colour: str | None
    rows: slice
    columns: slice


@dataclass(frozen=True, slots=True)
class Geometry:
    """The device's layout. ``shape`` is that of the assembled image, (rows, columns).

    ``raw_shapes`` maps the plane's key to the shape every raw frame must have.
    """

    shape: tuple[int, int]
    raw_shapes: dict[str, tuple[int, int]]
    outputs: tuple[Output, ...]
    regions: tuple[Region, ...]


Stated = Mapping[str, Mapping[str, Section]]  # by the plane's key and the header's keyword


@dataclass(frozen=True, slots=True)
class _Placed:
    """An output's sections in numbers, wherever they were written."""

    image: Section
    overscan: Section | None
    parallel_overscan: Section | None
    prescan: Section | None
    place: Section | None


def geometry(
    sensor: Sensor, raw_shapes: dict[str, tuple[int, int]], stated: Stated | None = None
) -> Geometry:
    """Lay out the outputs of ``sensor`` for frames of the shapes found.

    Parameters
    ----------
    sensor : Sensor
    raw_shapes : dict
        Plane key (``""`` for a plain frame, else the extension) to (rows, columns).
    stated : mapping, optional
        Sections that the frames' headers state, as in ``Frame.sections``.

    Raises
    ------
    RequestError
        A section leaves the frame, image sections overlap or leave gaps, or an extension
        is missing; the message names the output and both shapes.
    """
    options = sensor.outputs or {"": OutputOptions()}
    parts = {
        name: _sections(name, output, raw_shapes, stated or {}) for name, output in options.items()
    }
    places = _places(options, parts)
    outputs = tuple(
        Output(
            name=name,
            extension=output.extension or "",
            image=parts[name].image,
            overscan=parts[name].overscan,
            parallel_overscan=parts[name].parallel_overscan,
            prescan=parts[name].prescan,
            place=places[name],
            corner=output.corner,
        )
        for name, output in options.items()
    )
    shape = (
        max(output.place.row_stop for output in outputs),
        max(output.place.column_stop for output in outputs),
    )
    covered = sum(output.place.shape[0] * output.place.shape[1] for output in outputs)
    if covered != shape[0] * shape[1]:
        raise RequestError(
            f"sensor.outputs: the image sections cover {covered} pixels of an assembled image of"
            f" {shape[0]} x {shape[1]} (rows x columns); make them meet without gap or overlap"
        )
    regions = tuple(
        region for output in outputs for region in _regions(output, sensor, len(outputs))
    )
    return Geometry(shape=shape, raw_shapes=raw_shapes, outputs=outputs, regions=regions)


def _sections(
    name: str, output: OutputOptions, raw_shapes: dict[str, tuple[int, int]], stated: Stated
) -> _Placed:
    """The output's sections, after all but its place were found to lie inside the frame."""
    key = output.extension or ""
    if key not in raw_shapes:
        raise RequestError(
            f"sensor.outputs.{name}.extension: frames have no extension {key!r};"
            f" they have {', '.join(map(repr, raw_shapes))}"
        )
    rows, columns = raw_shapes[key]
    found: dict[str, Section | None] = {}
    for label in ("image", "overscan", "parallel_overscan", "prescan", "place"):
        section: Section | HeaderSection | None = getattr(output, label)
        source = ""
        if isinstance(section, HeaderSection):
            source = f" (from {section.keyword})"
            section = _stated(section, stated.get(key, {}), f"sensor.outputs.{name}.{label}")
        found[label] = section
        if section is None or label == "place":
            continue
        if section.row_stop > rows or section.column_stop > columns:
            raise RequestError(
                f"sensor.outputs.{name}.{label}: {fits_section(section)}{source} leaves the frame,"
                f" which has {columns} x {rows} pixels (x by y)"
            )
    image = found.pop("image") or Section(0, rows, 0, columns)
    return _Placed(image, **found)


def _stated(wanted: HeaderSection, stated: Mapping[str, Section], where: str) -> Section:
    if wanted.keyword not in stated:
        raise RequestError(
            f"{where}: is to be read from header {wanted.keyword}, and there are no headers here;"
            " write the section itself"
        )
    return stated[wanted.keyword]


def _places(options: dict[str, OutputOptions], placed: dict[str, _Placed]) -> dict[str, Section]:
    """Where each image section goes: as given, else in the raw frame's order without gaps."""
    parts = {name: one.image for name, one in placed.items()}
    given = {name: one.place for name, one in placed.items() if one.place is not None}
    if len(given) == len(options):
        for name, place in given.items():
            if place.shape != parts[name].shape:
                raise RequestError(
                    f"sensor.outputs.{name}.place: {fits_section(place)} is {place.shape[0]} x"
                    f" {place.shape[1]} (rows x columns), its image section is"
                    f" {parts[name].shape[0]} x {parts[name].shape[1]}"
                )
        return given
    if given or len({output.extension for output in options.values()}) > 1:
        raise RequestError(
            "sensor.outputs: give 'place' for every output when they come as separate extensions"
        )
    row_at = _ranks({(part.row_start, part.row_stop) for part in parts.values()})
    column_at = _ranks({(part.column_start, part.column_stop) for part in parts.values()})
    return {
        name: Section(
            row_at[part.row_start],
            row_at[part.row_start] + part.shape[0],
            column_at[part.column_start],
            column_at[part.column_start] + part.shape[1],
        )
        for name, part in parts.items()
    }


def _ranks(spans: set[tuple[int, int]]) -> dict[int, int]:
    """New start of each span when they are pushed together in order."""
    starts: dict[int, int] = {}
    position = 0
    end = 0
    for start, stop in sorted(spans):
        if start < end:
            raise RequestError(
                "sensor.outputs: image sections overlap in part; give sections that either share"
                " their whole range of rows or columns or none of it"
            )
        starts[start] = position
        position += stop - start
        end = stop
    return starts


def _regions(output: Output, sensor: Sensor, count: int) -> list[Region]:
    """One region for a monochrome output, four for a mosaic."""
    place = output.place
    named = f"output {output.name}" if count > 1 else ""
    if sensor.colour == "none":
        rows, columns = place.slices
        return [Region(named or "device", output.name, None, rows, columns)]
    regions = []
    for index, letter in enumerate(sensor.colour):
        row, column = divmod(index, 2)
        colour = CELL.get(letter) or _green(sensor.colour, row)
        regions.append(
            Region(
                ", ".join(filter(None, (named, colour))),
                output.name,
                colour.removeprefix("colour "),
                slice(place.row_start + (row - place.row_start) % 2, place.row_stop, 2),
                slice(place.column_start + (column - place.column_start) % 2, place.column_stop, 2),
            )
        )
    return regions


def _green(cell: str, row: int) -> str:
    """The two greens differ by their neighbours: those in red rows and those in blue rows."""
    return "colour green-red" if "R" in cell[2 * row : 2 * row + 2] else "colour green-blue"


def fits_section(section: Section) -> str:
    """The section in the FITS way, ``"[x1:x2,y1:y2]"``, 1-based and inclusive."""
    return (
        f"[{section.column_start + 1}:{section.column_stop},"
        f"{section.row_start + 1}:{section.row_stop}]"
    )
