"""Devices without pixels, and functions that inspect them in all the ways that can go wrong."""

import errno
import hashlib
import os
import signal
import time
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import numpy as np

from lot.results import invented_result
from sensorgrade.errors import DeviceError
from sensorgrade.frames.frame import DeviceFrames, Frame, Plane, Stack
from sensorgrade.lot.result import DeviceResult, InputFile
from sensorgrade.lot.result_json import result_json
from sensorgrade.recipe.model import DecisionRule, FrameRules, Recipe, Sensor

RECIPE = Recipe(
    name="two-output CCD",
    sensor=Sensor(technology="ccd", pixel_pitch=15.0),
    frames=FrameRules(),
    stages={},
    zones={},
    decision=DecisionRule(),
    grades=(),
    path="ccd.yaml",
    text="name: two-output CCD\n",
    sha256="ab" * 32,
)


def fake_device(source: Path, number: int, behaviour: str = "well") -> DeviceFrames:
    """A device of three files; ``behaviour`` (in the second) is what its inspection will do."""
    serial = f"S{number:05}"
    folder = source / serial
    frames = []
    for place, text in enumerate((serial, behaviour, "x" * 100)):
        path = folder / f"frame_{place}.raw"
        if not path.exists():
            folder.mkdir(parents=True, exist_ok=True)
            path.write_text(text)
        plane = Plane((8, 8), "uint16", path)
        frames.append(Frame(path, f"{serial}/{path.name}", "bias", {"": plane}))
    return DeviceFrames(serial, serial, (Stack("bias", tuple(frames)),), wafer="W1")


def fake_devices(source: Path, *behaviours: str) -> list[DeviceFrames]:
    return [fake_device(source, number, behaviour) for number, behaviour in enumerate(behaviours)]


def well(
    device: DeviceFrames, *, into: Path, threads: int, stage: Callable[[str], None]
) -> DeviceResult:
    """Reads the files and writes three; behaves as the second file says."""
    stage("read")
    behaviour = device.frames[1].path.read_text()
    word, _, amount = behaviour.partition(" ")
    if word == "slow":
        time.sleep(float(amount))
    elif word == "refuses":
        raise DeviceError(f"{device.serial}: no flats; take two or more")
    elif word == "breaks":
        raise ZeroDivisionError("nobody foresaw this")
    elif word == "hungry":
        np.ones(1 << 58, dtype=np.uint8)
    elif word == "full":
        raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC), str(into / "mask.fits"))
    elif word == "hangs":
        stage("wait for ever")
        time.sleep(1000)
    elif word == "dies":
        os.kill(os.getpid(), signal.SIGKILL)
    elif word == "dies-once":
        witness = device.frames[0].path.with_name("witness.log")
        if not witness.exists():
            witness.touch()
            os.kill(os.getpid(), signal.SIGKILL)
    stage("write")
    inputs = tuple(
        InputFile(
            frame.label,
            frame.path.stat().st_size,
            hashlib.sha256(frame.path.read_bytes()).hexdigest(),
        )
        for frame in device.frames
    )
    number = int(device.serial[1:])
    result = invented_result(number)
    result = replace(result, provenance=replace(result.provenance, inputs=inputs))
    (into / "result.json").write_text(result_json(result))
    (into / "mask.fits").write_bytes(os.path.realpath(__file__).encode() * 2000)
    if word == "more":
        (into / "master_flat.fits").write_text(behaviour)
    return result


def tree(folder: Path) -> dict[str, bytes]:
    """Every file below a folder but the ledger, by name."""
    return {
        str(path.relative_to(folder)): path.read_bytes()
        for path in sorted(folder.rglob("*"))
        if path.is_file() and path.name != "lot.sqlite"
    }
