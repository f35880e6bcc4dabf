"""FITS headers as 80-character cards, parsed by hand because a lot has 10**5 of them.

Source: FITS Standard 4.0, sections 3.3 (blocks), 4.1 and 4.2 (cards and their values).
"""

import re
from pathlib import Path
from typing import BinaryIO

from sensorgrade.errors import FrameError
from sensorgrade.frames.contents import Value

BLOCK = 2880
CARD = 80
MAX_BLOCKS = 2000  # 72,000 cards: forty times the longest headers that instruments write
WHOLE = re.compile(r"[+-]?[0-9]{1,70}")
REAL = re.compile(r"[+-]?(?:[0-9]{1,70}\.?[0-9]{0,70}|\.[0-9]{1,70})(?:[EDed][+-]?[0-9]{1,4})?")


def header(file: BinaryIO, path: Path) -> dict[str, Value]:
    """Values by upper-case keyword of the header that starts where ``file`` stands.

    The file is left at the end of the header's last block. A repeated keyword keeps its first
    value. Undefined and complex values, comments and history are left out; a value that is
    none of FITS's types is kept as text.

    Raises
    ------
    FrameError
        The file ends before the END card, or the header is longer than `MAX_BLOCKS`.
    """
    values: dict[str, Value] = {}
    continued: str | None = None
    for _ in range(MAX_BLOCKS):
        block = file.read(BLOCK)
        if len(block) < BLOCK:
            raise FrameError(
                f"{path}: truncated: the file ends within a FITS header; copy it again or take"
                " it out"
            )
        text = block.decode("latin-1")
        for start in range(0, BLOCK, CARD):
            key = text[start : start + 8].rstrip().upper()
            if text[start + 8 : start + 10] == "= ":
                found = _value(text[start + 10 : start + CARD])
            elif key == "END":
                return values
            elif key == "CONTINUE" and continued is not None:
                found = _continuation(values[continued], text[start + 8 : start + CARD])
                key, continued = continued, None
                del values[key]
            elif key == "HIERARCH":
                name, _, rest = text[start + 9 : start + CARD].partition("=")
                key, found = name.strip().upper(), _value(rest)
            else:
                continue
            if found is None or not key or key in values:
                continued = None
                continue
            values[key] = found
            continued = key if isinstance(found, str) and found.endswith("&") else None
    raise FrameError(
        f"{path}: its FITS header is longer than {MAX_BLOCKS * BLOCK // CARD} cards; it is"
        " damaged or hostile, take it out"
    )


def _value(field: str) -> Value | None:
    """The value of a card's columns 11 to 80, None where it is undefined or complex."""
    field = field.lstrip()
    if field.startswith("'"):
        return _quoted(field)
    text = field.partition("/")[0].rstrip()
    if text in ("T", "F"):
        return text == "T"
    if WHOLE.fullmatch(text):
        return int(text)
    if REAL.fullmatch(text):
        return float(text.upper().replace("D", "E"))
    if not text or text.startswith("("):
        return None
    return text


def _quoted(field: str) -> str:
    """A character string; two quotes stand for one, trailing blanks do not count."""
    parts = []
    start = 1
    while True:
        end = field.find("'", start)
        if end < 0:  # the closing quote is missing: the rest of the card is the text
            parts.append(field[start:])
            break
        parts.append(field[start:end])
        if field[end + 1 : end + 2] != "'":
            break
        parts.append("'")
        start = end + 2
    return "".join(parts).rstrip()


def _continuation(begun: Value, field: str) -> str:
    """A long string with its next card's part (FITS 4.0, 4.2.1.2)."""
    field = field.lstrip()
    addition = _quoted(field) if field.startswith("'") else ""
    return str(begun)[:-1] + addition
