"""A run of fake devices as a program of its own, so that it can be killed."""

import sys
from pathlib import Path

from lot.fakes import RECIPE, fake_devices, well
from sensorgrade.lot.engine import LotOptions, run_folder, run_lot
from sensorgrade.lot.progress import progress_line

DEVICES = 12


def main(source: Path, out: Path, seconds: str) -> int:
    devices = fake_devices(source, *[f"slow {seconds}"] * DEVICES)
    with run_folder(out) as ledger:
        outcome = run_lot(
            devices,
            well,
            ledger=ledger,
            recipe=RECIPE,
            options=LotOptions(jobs=2),
            report=lambda progress: print(progress_line(progress), flush=True),
        )
    return outcome.exit_status


if __name__ == "__main__":
    sys.exit(main(Path(sys.argv[1]), Path(sys.argv[2]), sys.argv[3]))
