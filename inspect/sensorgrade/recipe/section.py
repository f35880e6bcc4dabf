"""Sections of an image, written the FITS way: ``"[x1:x2,y1:y2]"``, 1-based and inclusive.

Or left to the frames: ``header DSEC1`` is the section that each header states as DSEC1.
"""

import re

from sensorgrade.recipe.model import HeaderSection, Section

PATTERN = r"\s*\[\s*([0-9]{1,7})\s*:\s*([0-9]{1,7})\s*,\s*([0-9]{1,7})\s*:\s*([0-9]{1,7})\s*\]\s*"
SECTION = re.compile(PATTERN)
HEADER_PATTERN = r"\s*header\s+([A-Za-z0-9_-]{1,8})\s*"
HEADER = re.compile(HEADER_PATTERN)
STEPPED = re.compile(r"[^,]*:[^,]*:")


class WrongSection(ValueError):
    """The text is no section; the message says what was wrong."""


def section(text: str) -> Section:
    """The section that ``text`` names, 0-based and half-open.

    Raises
    ------
    WrongSection
        The text has another form, counts from 0, or runs backwards.

    Examples
    --------
    >>> section("[1:512,1:1024]")
    Section(row_start=0, row_stop=1024, column_start=0, column_stop=512)
    """
    match = SECTION.fullmatch(text)
    if match is None:
        if any(STEPPED.search(part) for part in text.split(",")):
            raise WrongSection("sections have no steps")
        if "*" in text:
            raise WrongSection("write the numbers of the first and last pixel instead of *")
        raise WrongSection("write four whole numbers, as in [1:512,1:1024]")
    first_x, last_x, first_y, last_y = (int(number) for number in match.groups())
    if min(first_x, first_y) < 1:
        raise WrongSection("pixels count from 1")
    if last_x < first_x or last_y < first_y:
        axis = "x" if last_x < first_x else "y"
        raise WrongSection(f"its last {axis} lies before its first; sections are not reversed")
    return Section(first_y - 1, last_y, first_x - 1, last_x)


def output_section(text: str) -> Section | HeaderSection:
    """As `section`, or the keyword of ``header KEYWORD``.

    Raises
    ------
    WrongSection
        As `section`, or the text names no header keyword.
    """
    found = HEADER.fullmatch(text)
    if found is not None:
        return HeaderSection(found[1].upper())
    if text.split()[:1] == ["header"]:
        raise WrongSection("name one keyword of up to 8 letters and digits, as in header DSEC1")
    return section(text)
