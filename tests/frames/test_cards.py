import io
from pathlib import Path

import pytest
from astropy.io import fits
from hypothesis import given
from hypothesis import strategies as st

from frames.written import fits_bytes
from sensorgrade.errors import FrameError
from sensorgrade.frames.cards import header

PATH = Path("frame.fits")


def parsed(*cards):
    return header(io.BytesIO(fits_bytes(list(cards))), PATH)


@pytest.mark.parametrize(
    ("card", "expected"),
    [
        ("EXPTIME =                 20.0 / seconds", {"EXPTIME": 20.0}),
        ("EXPTIME =              2.0D+01", {"EXPTIME": 20.0}),
        ("NAXIS1  =                 1536", {"NAXIS1": 1536}),
        ("CCD-TEMP=         -10.03000000", {"CCD-TEMP": -10.03}),
        ("SIMPLE  =                    T", {"SIMPLE": True}),
        ("FILTER  = 'O''Neil '           / who", {"FILTER": "O'Neil"}),
        ("FILTER  = 'a/b'", {"FILTER": "a/b"}),
        ("FILTER  = '''/'", {"FILTER": "'/"}),
        ("FILTER  = '        '", {"FILTER": ""}),
        ("FILTER  = 'open", {"FILTER": "open"}),
        ("FILTER  = Blue / not quoted", {"FILTER": "Blue"}),
        ("FILTER  =", {}),
        ("FILTER  = (1.0, 2.0)", {}),
        ("COMMENT = 'no value'", {}),
        ("HISTORY   read = 4", {}),
        ("exptime = 5", {"EXPTIME": 5}),
        ("HIERARCH ESO DET READ SPEED = 'slow' / c", {"ESO DET READ SPEED": "slow"}),
        ("NUMBER  = 1_000", {"NUMBER": "1_000"}),
        ("NUMBER  = nan", {"NUMBER": "nan"}),
    ],
)
def test_a_card_gives_its_value(card, expected):
    assert {k: v for k, v in parsed(card).items() if k != "COMMENT"} == expected


def test_long_strings_are_joined():
    cards = ["TEXT    = 'first &'", "CONTINUE  'second &'", "CONTINUE  'third' / end", "A = 1"]
    assert parsed(*cards, "B       = 2") == {"TEXT": "first second third", "B": 2}


def test_the_first_of_repeated_keywords_counts():
    assert parsed("EXPTIME = 1.0", "EXPTIME = 2.0") == {"EXPTIME": 1.0}


def test_the_file_is_left_at_the_end_of_the_header():
    cards = [f"KEY{n:<5}= {n}" for n in range(100)]
    file = io.BytesIO(fits_bytes(cards) + b"data")
    assert len(header(file, PATH)) == 100
    assert file.read() == b"data"


def test_a_header_without_end_says_so():
    with pytest.raises(FrameError, match=r"frame.fits: truncated: the file ends within"):
        header(io.BytesIO(b" " * 2880), PATH)


def test_millions_of_cards_are_refused():
    class Endless(io.RawIOBase):
        def read(self, size=-1):
            return b" " * size

    with pytest.raises(FrameError, match="longer than 72000 cards"):
        header(Endless(), PATH)


# The library cuts "'/" short, so texts with both signs are left to the cases worked by hand.
TEXT = st.text(st.characters(min_codepoint=32, max_codepoint=126), max_size=60).filter(
    lambda text: not ("'" in text and "/" in text)
)
VALUE = st.one_of(
    st.booleans(),
    st.integers(-(10**15), 10**15),
    st.floats(allow_nan=False, allow_infinity=False),
    TEXT,
)


@given(st.dictionaries(st.from_regex(r"[A-Z][A-Z0-9_-]{0,7}", fullmatch=True), VALUE, max_size=40))
def test_headers_come_out_as_the_library_reads_them(written):
    for word in ("END", "COMMENT", "HISTORY", "CONTINUE", "HIERARCH", "SIMPLE", "XTENSION"):
        written.pop(word, None)
    text = fits.Header(list(written.items())).tostring()
    ours = header(io.BytesIO(text.encode("ascii")), PATH)
    assert ours == dict(fits.Header.fromstring(text).items())


@given(st.binary(max_size=6000))
def test_any_bytes_give_a_header_or_a_sentence(content):
    try:
        header(io.BytesIO(content), PATH)
    except FrameError as error:
        assert str(error).startswith("frame.fits: ")
