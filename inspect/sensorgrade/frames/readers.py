"""The reader table: which function reads which file, by the end of its name."""

from collections.abc import Callable
from pathlib import Path

from sensorgrade.frames.contents import FileContents, Layout
from sensorgrade.frames.fits import read_fits
from sensorgrade.frames.npy import read_npy
from sensorgrade.frames.raw import read_raw
from sensorgrade.frames.tiff import read_tiff

Reader = Callable[[Path, Layout], FileContents]

READERS: dict[str, Reader] = {
    ".fits": read_fits,
    ".fit": read_fits,
    ".fts": read_fits,
    ".fits.gz": read_fits,
    ".fit.gz": read_fits,
    ".fts.gz": read_fits,
    ".fits.fz": read_fits,
    ".fit.fz": read_fits,
    ".fz": read_fits,
    ".tif": read_tiff,
    ".tiff": read_tiff,
    ".npy": read_npy,
    ".raw": read_raw,
    ".bin": read_raw,
    ".dat": read_raw,
}

# Files that benches write beside frames and that are plainly no frames.
BESIDE_FRAMES = (
    *(".txt", ".md", ".log", ".csv", ".json", ".yaml", ".yml", ".toml", ".ini", ".xml", ".html"),
    *(".pdf", ".doc", ".docx", ".xls", ".xlsx", ".png", ".jpg", ".jpeg", ".svg", ".py", ".sh"),
    *(".sha256", ".md5", ".ecsv", ".sqlite", ".db"),
)


def reader_of(name: str) -> Reader | None:
    """The reader of a file of that name, None when no format has that ending."""
    lower = name.lower()
    for length in (2, 1):
        ending = "".join(f".{part}" for part in lower.split(".")[1:][-length:])
        if ending in READERS:
            return READERS[ending]
    return None
