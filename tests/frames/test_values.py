import pytest

from sensorgrade.frames import values


@pytest.mark.parametrize(
    ("word", "kind"),
    [
        *(("BIAS", "bias"), ("Zero", "bias"), ("bias frame", "bias"), ("Dark Frame", "dark")),
        *(("Flat Field", "flat"), ("FLAT", "flat"), ("flat-field", "flat"), ("Fe-55", "x-ray")),
        *(("X-Ray", "x-ray"), ("trap pump", "pump"), ("light", None), ("object", None), ("", None)),
    ],
)
def test_kinds_are_known_in_any_spelling(word, kind):
    assert values.kind_of(word, {}) == kind


def test_the_recipes_own_words_come_first():
    own = {"Lamp On": "flat", "zero": "dark", "focus": "ignore"}
    assert values.kind_of("LAMP_ON", own) == "flat"
    assert values.kind_of("ZERO", own) == "dark"
    assert values.kind_of("focus", own) == "ignore"
    assert values.kind_of("bias", own) == "bias"


@pytest.mark.parametrize(
    ("written", "expected"),
    [
        *((20, 20.0), (0.5, 0.5), ("20", 20.0), ("20 s", 20.0), ("20s", 20.0), ("500 ms", 0.5)),
        *(("2 min", 120.0), ("1e3us", 1e-3), ("3 sec", 3.0), (" 4 ", 4.0), ("-1.5", -1.5)),
        *(("twenty", None), ("20 m", None), ("20 furlongs", None), (True, None), ("", None)),
        *(("nan", None), ("inf s", None), ("1_0", None)),
    ],
)
def test_exposures_come_out_in_seconds(written, expected):
    found = values.seconds(written)
    assert found == (None if expected is None else pytest.approx(expected, rel=1e-12))


@pytest.mark.parametrize(
    ("written", "expected"),
    [
        *((-10.03, -10.03), ("-10 C", -10.0), ("-10 degC", -10.0), ("-10°C", -10.0)),
        *(("263.15 K", -10.0), ("-10", -10.0), ("10 F", None), ("cold", None)),
    ],
)
def test_temperatures_come_out_in_degrees_celsius(written, expected):
    found = values.celsius(written)
    assert found == (None if expected is None else pytest.approx(expected, abs=1e-9))


@pytest.mark.parametrize(
    ("written", "expected"),
    [
        *((550, "550"), (550.0, "550"), ("550 nm", "550"), ("0.55 um", "550"), ("Blue", "Blue")),
        *(("532nm laser", "532nm laser"), ("  ", None), ("2MASS", "2MASS")),
    ],
)
def test_wavelengths_are_numbers_of_nm_or_names(written, expected):
    assert values.wavelength(written) == expected


def test_levels_in_different_units_stay_in_proportion():
    assert values.light("5 mW") == pytest.approx(1000 * values.light("5 uW"))
    assert values.light("12.5") == 12.5
    assert values.light("5 quux") is None


@pytest.mark.parametrize(
    ("written", "of_day", "expected"),
    [
        ("1970-01-01T00:00:10", None, 10.0),
        ("1970-01-01T00:00:10.25", "11:11:11", 10.25),
        ("1970-01-01", "00:01:00", 60.0),
        ("1970-01-01", None, 0.0),
        ("1970-01-01T01:00:00+01:00", None, 0.0),
        ("1970-01-01T00:00:00Z", None, 0.0),
        ("2024-09-23T18:43:27.927", None, 1727117007.927),
        ("yesterday", None, None),
        ("2024-13-01T00:00:00", None, None),
        (2024, None, None),
    ],
)
def test_times_are_seconds_since_1970(written, of_day, expected):
    found = values.moment(written, of_day)
    assert found == (None if expected is None else pytest.approx(expected, abs=1e-6))


@pytest.mark.parametrize(
    ("written", "expected"),
    [(5, 5), (5.0, 5), ("5", 5), ("5.5", None), ("5 s", None), ("x", None), (1e300, None)],
)
def test_whole_numbers(written, expected):
    assert values.whole(written) == expected


@pytest.mark.parametrize(
    ("written", "expected"), [(17, "17"), (17.0, "17"), (" A7 ", "A7"), ("", None), (1.5, "1.5")]
)
def test_texts(written, expected):
    assert values.text(written) == expected
