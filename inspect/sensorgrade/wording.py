"""Numbers and names as people read them: value and uncertainty to the same place, units, powers."""

import math
from functools import cache

NO_DOUBT = 1e-9  # of a value: a standard uncertainty below that is not told
SUPERSCRIPTS = str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹")


@cache
def unit_text(unit: str) -> str:
    """An astropy unit string as it is printed: no space about the stroke, raised powers.

    >>> unit_text("electron / s"), unit_text("cm-2"), unit_text("DN2")
    ('electron/s', 'cm⁻²', 'DN²')
    """
    text = unit.replace(" / ", "/").replace("**", "").replace("um", "µm").replace("deg_C", "°C")
    out = []
    for index, letter in enumerate(text):
        raised = letter.isdigit() or (letter == "-" and text[index + 1 : index + 2].isdigit())
        after_letter = index > 0 and (text[index - 1].isalpha() or text[index - 1] in "-0123456789")
        out.append(letter.translate(SUPERSCRIPTS) if raised and after_letter else letter)
    return "".join(out)


@cache
def name_text(name: str) -> str:
    """A measurement's or count's name in words.

    >>> name_text("read_noise"), name_text("dsnu")
    ('read noise', 'DSNU')
    """
    words = name.replace("_", " ").split(" ")
    return " ".join(word.upper() if word in ACRONYMS else word for word in words)


ACRONYMS = frozenset({"dsnu", "prnu", "cti", "adc", "dn", "snr", "eper", "fpr"})


def number_text(value: float, digits: int = 4) -> str:
    """A bare number with so many significant digits, plain where it stays short.

    >>> number_text(12345.678), number_text(3.2e-7), number_text(0.5)
    ('12346', '3.2 × 10⁻⁷', '0.5')
    """
    if value == 0:
        return "0"
    if not math.isfinite(value):
        return "beyond any number"
    exponent = math.floor(math.log10(abs(value)))
    if -4 <= exponent < 7:
        places = max(digits - 1 - exponent, 0)
        text = f"{value:.{places}f}"
        text = text.rstrip("0").rstrip(".") if "." in text else text
        return text.replace("-", "−")
    mantissa = f"{value / 10.0**exponent:.{digits - 1}f}".rstrip("0").rstrip(".")
    return f"{mantissa} × 10{str(exponent).translate(SUPERSCRIPTS)}".replace("-", "−")


def doubt_text(value: float, standard_uncertainty: float | None, unit: str) -> str:
    """Value and standard uncertainty: two digits of the uncertainty, the value to its place.

    The rule is common practice after JCGM 100:2008, 7.2.6.

    >>> doubt_text(4.93217, 0.0123, "electron")
    '4.932 ± 0.012 electron'
    >>> doubt_text(3.14159e-6, 2.2e-8, "")
    '(3.142 ± 0.022) × 10⁻⁶'
    >>> doubt_text(270.0, 1e-90, "")
    '270'
    """
    tail = f" {unit_text(unit)}" if unit else ""
    # A count whose pixels are all but certain has a doubt that nobody can picture.
    told = standard_uncertainty > NO_DOUBT * abs(value) if standard_uncertainty else False
    if not standard_uncertainty or not told or not math.isfinite(standard_uncertainty):
        return f"{number_text(value, 6)}{tail}"
    largest = max(abs(value), standard_uncertainty)
    exponent = math.floor(math.log10(largest))
    shift = 0 if -4 <= exponent < 7 else exponent
    place = math.floor(math.log10(standard_uncertainty)) - shift
    places = max(1 - place, 0)
    scaled, doubt = value / 10.0**shift, standard_uncertainty / 10.0**shift
    if places == 0:
        step = 10.0 ** max(place - 1, 0)
        scaled, doubt = round(scaled / step) * step, round(doubt / step) * step
    text = f"{scaled:.{places}f} ± {doubt:.{places}f}".replace("-", "−")
    if shift:
        text = f"({text}) × 10{str(shift).translate(SUPERSCRIPTS)}"
    return f"{text}{tail}"


def percent_text(part: int, whole: int) -> str:
    """A share in %, rounded to a whole number only where that is no 0 and no 100.

    >>> percent_text(5, 6), percent_text(9999, 10000), percent_text(0, 0)
    ('83 %', '99.99 %', '—')
    """
    if not whole:
        return "—"
    share = 100 * part / whole
    if 1 <= share <= 99 or part in (0, whole):
        return f"{share:.0f} %"
    return f"{share:.2f} %" if 0.005 <= share <= 99.995 else f"{part} of {whole}"
