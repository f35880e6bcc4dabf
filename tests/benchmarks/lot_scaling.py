"""How a lot speeds up with cores: ``python lot_scaling.py`` prints a section of Markdown.

24 devices of 1024 x 1024 with 40 frames each, on one core and on two, in turn. Each run is a
process of its own that may use only those cores, as `sensorgrade inspect` would be started.
``--quick`` uses small frames, to try the script itself.
"""

import argparse
import json
import os
import subprocess
import sys
import tempfile
from pathlib import Path

import numpy as np
from bench_frames import write_device
from run import RECIPE, lot_rate, spread

DEVICES = 24
DISTINCT = 6  # devices with frames of their own; the others are links to the same files
REPEATS = 3
WANTED = 1.85


def write_lot(source: Path, size: int) -> None:
    """The frames of all devices."""
    for number in range(DEVICES):
        folder = source / f"S{number:02d}"
        if number < DISTINCT:
            write_device(folder, size, bias=10, darks=8, pairs=8, flats=6, serial=f"S{number:02d}")
            continue
        folder.mkdir()
        for path in (source / f"S{number % DISTINCT:02d}").iterdir():
            os.link(path, folder / path.name)


def rates(source: Path, recipe_file: Path, out: Path, cores: list[int]) -> tuple[float, float]:
    """Devices per second of a process that may use these cores: whole run, and steady state."""
    program = [sys.executable, __file__, "--run", str(source), str(recipe_file), str(out)]
    found = subprocess.run(
        program,
        check=True,
        capture_output=True,
        text=True,
        preexec_fn=lambda: os.sched_setaffinity(0, cores),
    )
    whole, steady = json.loads(found.stdout)
    return whole, steady


def section(size: int) -> list[str]:
    """The rates on one core and on two, and their ratio."""
    cores = sorted(os.sched_getaffinity(0))[:2]
    with tempfile.TemporaryDirectory(prefix="benchmark-") as name:
        work = Path(name)
        recipe_file = work / "recipe.yaml"
        recipe_file.write_text(RECIPE.replace(", serial: SERIAL", ""))
        write_lot(work / "in", size)
        one, two = [], []
        rates(work / "in", recipe_file, work / "warm", cores)
        for number in range(REPEATS):
            one.append(rates(work / "in", recipe_file, work / f"one-{number}", cores[:1]))
            two.append(rates(work / "in", recipe_file, work / f"two-{number}", cores))
    lines = [
        f"## {DEVICES} devices of {size} x {size}, 40 frames each, on one core and on two",
        "",
        f"{DISTINCT} of them have frames of their own, the others are links to those.",
        "",
        "| figure | one core | two cores | ratio | wanted |",
        "|---|---|---|---|---|",
    ]
    for place, label in enumerate(("whole run, with start and lot page", "steady state")):
        alone, both = [pair[place] for pair in one], [pair[place] for pair in two]
        ratio = float(np.median(both) / np.median(alone))
        lines.append(
            f"| devices per second, {label} | {spread(alone)} | {spread(both)} | {ratio:.2f}"
            f" | {WANTED if place else ''} |"
        )
    return [*lines, ""]


def main() -> None:
    """Print the section, or make one run for it."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--quick", action="store_true", help="small frames, to try the script")
    parser.add_argument("--run", nargs=3, type=Path, help=argparse.SUPPRESS)
    given = parser.parse_args()
    if given.run:
        jobs = len(os.sched_getaffinity(0))
        print(json.dumps(lot_rate(*given.run, jobs=jobs)))
    else:
        print("\n".join(section(128 if given.quick else 1024)))


if __name__ == "__main__":
    main()
