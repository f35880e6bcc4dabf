"""Files that appear whole under their name or not at all."""

import os
import tempfile
from collections.abc import Iterable
from pathlib import Path

UNFINISHED = ".unfinished-"  # how names of work in progress begin; a later run removes them


def write_whole(path: Path, content: str | bytes | Iterable[bytes | memoryview]) -> None:
    """Write a file beside its place, have it on the disk, then give it its name.

    Content that comes in parts follows each other without gap, and is never held as a whole.

    Raises
    ------
    OSError
        It could not be written; nothing was changed and nothing is left behind.
    """
    handle, name = tempfile.mkstemp(prefix=UNFINISHED, dir=path.parent)
    unfinished = Path(name)
    try:
        with os.fdopen(handle, "wb") as file:
            if isinstance(content, str | bytes):
                file.write(content.encode() if isinstance(content, str) else content)
            else:
                file.writelines(content)
            file.flush()
            os.fchmod(file.fileno(), 0o666 & ~_umask())
            os.fsync(file.fileno())
        unfinished.replace(path)
    except BaseException:
        unfinished.unlink(missing_ok=True)
        raise


def _umask() -> int:
    """The process's mask of permissions, which can only be read by setting it."""
    mask = os.umask(0)
    os.umask(mask)
    return mask
