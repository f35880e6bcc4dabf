"""Safe, unique folder names from serial numbers, which can hold anything."""

import hashlib
import re
from collections import Counter
from collections.abc import Iterable

LONGEST = 64
UNSAFE = re.compile(r"[^A-Za-z0-9._-]+")
# Names that some file systems give to devices, and those that a run gives to its own files.
RESERVED = re.compile(r"(con|prn|aux|nul|com\d|lpt\d|lot)(\..*)?", re.IGNORECASE)

DIGEST = re.compile(r"-[0-9a-f]{12}$", re.IGNORECASE)  # could be another serial's folder


def folder_names(serials: Iterable[str]) -> dict[str, str]:
    """A folder name for each serial: letters, digits, ``.``, ``_`` and ``-``, at most 77 of them.

    A serial that is such a name already keeps it. Any other gets a digest of the serial
    appended, so that no two share a folder, also where case does not count.
    """
    distinct = sorted(set(serials))
    shared = Counter(serial.casefold() for serial in distinct)
    return {serial: _folder_name(serial, shared[serial.casefold()] > 1) for serial in distinct}


def _folder_name(serial: str, shared: bool) -> str:
    name = UNSAFE.sub("_", serial).strip("._- ")[:LONGEST].rstrip("._-")
    safe = name == serial and not RESERVED.fullmatch(name) and not DIGEST.search(name)
    if name and safe and not shared:
        return name
    digest = hashlib.sha256(serial.encode("utf-8", "surrogateescape")).hexdigest()
    return f"{'_' if RESERVED.fullmatch(name) or not name else ''}{name}-{digest[:12]}"
