"""What a device's result depends on, as two digests: how a later run knows it need not repeat."""

import hashlib
from contextlib import suppress
from dataclasses import dataclass, fields
from pathlib import Path

from sensorgrade import __version__
from sensorgrade.frames.frame import DeviceFrames

BLOCK = 1 << 20  # bytes read at once while a file is digested


@dataclass(frozen=True, slots=True)
class Fingerprint:
    """``described`` covers recipe, version, identity and what is known of each frame.

    ``state`` covers size and times of each file: a quick sign that no content changed. It may
    change without the content (a copy, a restored backup), never the other way round.
    """

    described: str
    state: str


def fingerprint(device: DeviceFrames, *, recipe_sha256: str) -> Fingerprint:
    """The fingerprint of one device as its files are now.

    A file that has vanished leaves ``state`` empty, which equals no recorded state.
    """
    described = hashlib.sha256(f"{__version__} {recipe_sha256}".encode())
    identity = (device.serial, device.lot, device.wafer, device.die_row, device.die_column)
    described.update(repr(identity).encode())
    state = hashlib.sha256()
    for frame in sorted(device.frames, key=lambda frame: frame.label):
        known = [
            getattr(frame, field.name)
            for field in fields(frame)
            if field.name not in ("path", "planes")
        ]
        described.update(repr(known).encode())
        try:
            status = frame.path.stat()
        except OSError:
            return Fingerprint(described.hexdigest(), "")
        # The time of the last change of status cannot be set back, as that of content can.
        state.update(
            repr((frame.label, status.st_size, status.st_mtime_ns, status.st_ctime_ns)).encode()
        )
    return Fingerprint(described.hexdigest(), state.hexdigest())


def contents(device: DeviceFrames) -> dict[str, str]:
    """SHA-256 of every frame's file, by label; files that cannot be read are left out."""
    digests = {}
    for frame in device.frames:
        with suppress(OSError):
            digests[frame.label] = file_sha256(frame.path)
    return digests


def file_sha256(path: Path) -> str:
    """SHA-256 of a file as hexadecimal digits.

    Raises
    ------
    OSError
        It cannot be read.
    """
    digest = hashlib.sha256()
    with path.open("rb") as file:
        while block := file.read(BLOCK):
            digest.update(block)
    return digest.hexdigest()
