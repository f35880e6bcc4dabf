"""Which header keyword states what, guessed from the keywords that a folder's frames have."""

from collections import Counter
from collections.abc import Callable, Sequence

from sensorgrade.frames.contents import Value
from sensorgrade.frames.values import celsius, kind_of, moment, seconds, text, whole

Values = dict[str, Value]

# For each key of a recipe's frames part: usual keywords, likeliest first, and what the value must
# be. Conventions of FITS and of observatories and benches; common practice, no single source.
USUAL: dict[str, tuple[tuple[str, ...], Callable[[Value], object]]] = {
    "kind": (
        ("IMAGETYP", "OBSTYPE", "FRAMETYP", "FRAME", "IMGTYPE", "IMAGETYPE", "EXPTYPE", "OBJECT"),
        lambda value: kind_of(str(value), {}),
    ),
    "exposure": (
        ("EXPTIME", "EXPOSURE", "EXP_TIME", "ITIME", "INTTIME", "TEXP", "EXPOS", "XPOSURE"),
        seconds,
    ),
    "temperature": (
        (
            *("CCD-TEMP", "DET-TEMP", "CCDTEMP", "DETTEMP", "SENSTEMP", "TEMPERAT", "TEMP"),
            *("CCD_TEMP", "DET_TEMP", "SET-TEMP"),
        ),
        celsius,
    ),
    "level": (("LIGHT", "LEVEL", "FLUX", "LAMPCUR", "LEDCUR", "PHOTDIOD"), seconds),
    "wavelength": (("WAVELEN", "WAVELNTH", "WAVE", "LAMBDA", "FILTER", "FILTER1"), text),
    "time": (("DATE-OBS", "DATE-BEG", "UTSTART", "DATE"), lambda value: moment(value, "00:00:00")),
    "serial": (
        ("SERIAL", "SERNO", "SERIALNO", "DEVICE", "CHIPID", "CHIP_ID", "DETSER", "SENSORID"),
        text,
    ),
    "lot": (("LOT", "LOTID", "LOT_ID", "BATCH"), text),
    "wafer": (("WAFER", "WAFERID", "WAFER_ID"), text),
    "die_row": (("DIEROW", "DIE_ROW", "DIEY", "DIE_Y"), whole),
    "die_column": (("DIECOL", "DIE_COL", "DIEX", "DIE_X"), whole),
    "cycles": (("NPUMP", "CYCLES", "PUMPS", "NCYCLES"), whole),
    "phase_time": (("TPH", "TPHASE", "PHASETIM", "DWELL"), seconds),
}
PITCH = ("XPIXSZ", "XPIXSIZE", "PIXSIZE1", "PIXSIZE", "PIXSZ")
ENOUGH = 0.5  # of the frames must have the keyword with a value that can be read


def guessed_keywords(frames: Sequence[Values]) -> dict[str, str]:
    """Key of the recipe's frames part to the header keyword, for those that were found.

    ``frames`` are the header values of each frame, by upper-case keyword.
    """
    found = {}
    for key, (names, read) in USUAL.items():
        shares = {
            name: sum(name in values and read(values[name]) is not None for values in frames)
            for name in names
        }
        best = max(names, key=lambda name: shares[name])  # the first of those that tie
        if frames and shares[best] >= ENOUGH * len(frames):
            found[key] = best
    return found


def unknown_kinds(frames: Sequence[Values], keyword: str) -> Counter[str]:
    """Words under ``keyword`` that name no kind, with how many frames carry them."""
    words = (str(values[keyword]).strip() for values in frames if keyword in values)
    return Counter(word for word in words if word and kind_of(word, {}) is None)


def pixel_pitch(frames: Sequence[Values]) -> tuple[str, float] | None:
    """The keyword that states the pixel pitch and its value [um]; None without one."""
    for name in PITCH:
        for values in frames:
            pitch = values.get(name)
            if isinstance(pitch, int | float) and not isinstance(pitch, bool) and 0.5 < pitch < 200:
                return name, float(pitch)
    return None
