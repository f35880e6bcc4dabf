"""How many devices can be at work at once, given the cores and the memory that are free."""

import os
from dataclasses import dataclass
from pathlib import Path

import joblib

from sensorgrade.errors import RequestError
from sensorgrade.frames.frame import DeviceFrames

PROCESS = 250_000_000  # bytes: the interpreter and the libraries of one worker
PER_PIXEL = 160  # bytes: working maps of the stage that needs most
PER_STACK = 10  # bytes per pixel: mean, variance (float32) and count (uint16) of each stack
SHARE = 0.75  # of the free memory, unless the user says how much


@dataclass(frozen=True, slots=True)
class Capacity:
    """``jobs`` devices at work at once, each with ``threads`` cores."""

    jobs: int
    threads: int


def capacity(
    devices: list[DeviceFrames], *, jobs: int | None, memory: float | None, cores: int | None = None
) -> Capacity:
    """Devices at once and cores for each, so that neither cores nor memory are overdrawn.

    Parameters
    ----------
    devices : list of DeviceFrames
        Those to be inspected.
    jobs : int, optional
        Most devices at once; the number of cores when not given.
    memory : float, optional
        Bytes that all of them may use together; 75 % of what is free when not given.

    Raises
    ------
    RequestError
        ``jobs`` or ``memory`` is not positive.
    """
    if jobs is not None and jobs < 1:
        raise RequestError(f"--jobs: expected a whole number, 1 or more, found {jobs}")
    if memory is not None and memory <= 0:
        raise RequestError(f"--memory: expected an amount above 0, found {memory:g} bytes")
    cores = cores or joblib.cpu_count()
    budget = SHARE * free_memory() if memory is None else memory
    need = max(map(device_memory, devices), default=PROCESS)
    count = max(1, min(jobs or cores, len(devices), int(budget / need)))
    return Capacity(count, max(1, cores // count))


def device_memory(device: DeviceFrames) -> int:
    """Bytes that the inspection of one device needs at its peak, rather too many than too few.

    The number of frames does not matter: they are read in bands of rows.
    """
    shapes = [
        sum(plane.shape[0] * plane.shape[1] for plane in stack.frames[0].planes.values())
        for stack in device.stacks
        if stack.frames
    ]
    return PROCESS + max(shapes, default=0) * (PER_PIXEL + PER_STACK * len(shapes))


def free_memory() -> int:
    """Bytes that can be had without swapping: the machine's, or the container's if less."""
    try:
        lines = Path("/proc/meminfo").read_text(encoding="ascii").splitlines()
        free = next(int(line.split()[1]) * 1024 for line in lines if "MemAvailable" in line)
    except (OSError, StopIteration):
        free = os.sysconf("SC_PAGE_SIZE") * os.sysconf("SC_PHYS_PAGES") // 2
    group = Path("/sys/fs/cgroup")
    try:
        most = int((group / "memory.max").read_text(encoding="ascii"))
        used = int((group / "memory.current").read_text(encoding="ascii"))
    except (OSError, ValueError):  # no control group, or one without a limit ("max")
        return free
    return min(free, max(most - used, 0))
