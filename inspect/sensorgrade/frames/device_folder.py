"""Which folder stands for a device, and what it is called."""

import re
from collections import Counter
from collections.abc import Sequence
from pathlib import Path

from sensorgrade.frames.values import kind_of
from sensorgrade.recipe.document import printable

CONDITION = re.compile(r"[-_ ]*\d+(\.\d+)?(s|ms|us|nm|c|k)$", re.IGNORECASE)
LONGEST_NAME = 400


def device_folder(folder: Path, source: Path) -> Path:
    """``folder``, or the one above the first folder on the way that is named for a kind.

    Names such as "BIAS", "Flat Field" and "dark_20s" count as kinds.
    """
    home = source
    for part in folder.relative_to(source).parts:
        if kind_of(CONDITION.sub("", part), {}) is not None:
            return home
        home /= part
    return home


def distinct_names(folders: Sequence[Path]) -> dict[Path, str]:
    """The shortest end of each folder's path that no other one has."""
    parts = {folder: folder.resolve().parts for folder in folders}
    names: dict[Path, str] = {}
    length = 1
    open_ones = list(parts)
    while open_ones:
        shared = Counter(parts[folder][-length:] for folder in parts)
        for folder in open_ones:
            end = parts[folder][-length:]
            if shared[end] == 1 or length >= len(parts[folder]):
                names[folder] = printable("/".join(end), LONGEST_NAME)
        open_ones = [folder for folder in open_ones if folder not in names]
        length += 1
    return names


def label_prefixes(sources: Sequence[Path]) -> dict[Path, str]:
    """What goes before labels: nothing for one source, else enough of its path to tell it."""
    if len(sources) == 1:
        return {sources[0]: ""}
    return {source: f"{name}/" for source, name in distinct_names(sources).items()}
