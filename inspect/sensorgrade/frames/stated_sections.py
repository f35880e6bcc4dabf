"""Sections of outputs that a frame's own header states, where the recipe says so."""

from collections.abc import Mapping
from pathlib import Path

from sensorgrade.errors import FrameError
from sensorgrade.frames.contents import FileContents
from sensorgrade.recipe.document import printable
from sensorgrade.recipe.model import HeaderSection, OutputOptions, Section
from sensorgrade.recipe.section import WrongSection, section

SECTIONS = ("image", "overscan", "parallel_overscan", "prescan", "place")  # fields of an output


def stated_sections(
    path: Path, outputs: Mapping[str, OutputOptions], contents: FileContents
) -> dict[str, dict[str, Section]]:
    """Each section that an output takes from the header, by the plane's key and keyword.

    An output in an extension of its own is looked up in that extension's header, then in the
    primary's.

    Raises
    ------
    FrameError
        The header lacks a keyword, or what stands there is no section.
    """
    found: dict[str, dict[str, Section]] = {}
    for name, output in outputs.items():
        key = output.extension or ""
        header = contents.headers.get(key, contents.values)
        for field in SECTIONS:
            wanted = getattr(output, field)
            if not isinstance(wanted, HeaderSection):
                continue
            if wanted.keyword not in header:
                raise FrameError(
                    f"{path}: its header has no {wanted.keyword}, from which the recipe takes"
                    f" sensor.outputs.{name}.{field}"
                )
            text = str(header[wanted.keyword])
            try:
                found.setdefault(key, {})[wanted.keyword] = section(text)
            except WrongSection as wrong:
                raise FrameError(
                    f"{path}: {wanted.keyword} is {printable(text)!r}, from which the recipe takes"
                    f" sensor.outputs.{name}.{field}; {wrong}"
                ) from wrong
    return found
