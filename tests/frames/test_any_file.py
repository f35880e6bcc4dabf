"""Whatever stands in a manifest or in a FITS header: rows and images, or one clear sentence."""

import csv
import io
import math
import tempfile
from pathlib import Path

from hypothesis import given
from hypothesis import strategies as st

from frames.written import fits_bytes
from sensorgrade.errors import FrameError, RequestError
from sensorgrade.frames.contents import MAX_SAMPLES, Layout
from sensorgrade.frames.fits import read_fits
from sensorgrade.frames.manifest import manifest_rows

CELL = st.text(st.characters(exclude_characters="\0", codec="utf-8"), max_size=20)
NAMED = CELL.map(lambda text: text.strip().replace("\\", "/")).filter(
    lambda name: name != "" and not name.startswith("./")
)


def rows_of(content: bytes) -> dict[str, dict[str, object]]:
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "list.csv"
        path.write_bytes(content)
        return dict(manifest_rows(path))


@given(st.lists(st.tuples(NAMED, CELL, CELL), unique_by=lambda row: row[0], max_size=8))
def test_a_manifest_written_by_the_usual_library_is_read_as_written(rows):
    text = io.StringIO()
    csv.writer(text).writerows([("file", "Kind", "note"), *rows])
    expected = {
        name: {key: cell.strip() for key, cell in (("KIND", kind), ("NOTE", note)) if cell.strip()}
        for name, kind, note in rows
    }
    found = rows_of(text.getvalue().encode())
    found = {
        name: {key: cell for key, cell in row.items() if key != "FILE"}
        for name, row in found.items()
    }
    assert found == expected


@given(st.binary(max_size=200) | st.text(max_size=200).map(lambda t: b"file,kind\n" + t.encode()))
def test_any_manifest_is_read_or_refused_in_one_line(content):
    try:
        rows = rows_of(content)
    except RequestError as error:
        assert "list.csv" in str(error)
        assert str(error).isprintable()
    else:
        assert all(isinstance(name, str) for name in rows)


VALUE = st.one_of(
    st.integers(-(10**30), 10**30).map(str),
    st.floats().map(repr),
    st.sampled_from(
        ["T", "F", "'16'", "16", "2", "32", "0", "-1", "(1,2)", "", "1E400", "&", "''"]
    ),
    st.text(st.characters(min_codepoint=32, max_codepoint=126), max_size=30),
)
WORDS = ["SIMPLE", "BITPIX", "NAXIS", "NAXIS1", "NAXIS2", "NAXIS3", "BSCALE", "BZERO", "BLANK"]
WORDS += ["PCOUNT", "GCOUNT", "GROUPS", "EXTEND", "ZIMAGE", "ZBITPIX", "ZNAXIS", "END", "CONTINUE"]
CARDS = st.lists(st.tuples(st.sampled_from(WORDS), VALUE), max_size=12)
USUAL = ["SIMPLE  = T", "BITPIX  = 16", "NAXIS   = 2", "NAXIS1  = 8", "NAXIS2  = 4"]


@given(st.integers(0, 5), CARDS)
def test_any_header_gives_an_image_that_lies_in_the_file_or_one_sentence(keep, cards):
    lines = USUAL[:keep] + [f"{word:<8}= {value}"[:80] for word, value in cards]
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "x.fits"
        path.write_bytes(fits_bytes(lines, b"\1" * 64))
        try:
            (plane,) = read_fits(path, Layout()).planes.values()
        except FrameError as error:
            assert str(error).startswith(f"{path}: ")
            assert str(error).isprintable()
        else:
            assert 1 <= math.prod(plane.shape) <= MAX_SAMPLES
            assert plane.offset <= path.stat().st_size
