"""How soon pages are made: ``python pages.py`` prints a section of Markdown.

The device has 4096 x 4096 pixels and 3000 hot ones, the lot 10 000 devices; both are made up in
memory, so that only the making of the pages is timed.
"""

import sys
import time
from collections.abc import Callable
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parents[1]))
from report.sample import device, lot
from sensorgrade.report.device_page import device_page
from sensorgrade.report.lot_page import lot_page

REPEATS = 5


def timed(make: Callable[[], str]) -> tuple[str, str]:
    """Range of the times of some calls [s], and the size of what they gave [MiB]."""
    seconds = []
    for _ in range(REPEATS):
        start = time.perf_counter()
        text = make()
        seconds.append(time.perf_counter() - start)
    return f"{min(seconds):.2f} to {max(seconds):.2f} s", f"{len(text.encode()) / 2**20:.1f} MiB"


def main() -> None:
    """Measure and print."""
    large = device(shape=(4096, 4096), hot=3000)
    results, recipe = lot(10_000)
    pages = {
        "device of 4096 x 4096 pixels | 6 s, 6 MiB": lambda: device_page(
            large.result, **large.parts
        ),
        "lot of 10 000 devices | 10 s": lambda: lot_page(
            results, failures=[], recipe=recipe, name="lot"
        ),
    }
    print("## Pages\n\n| page | wanted | made in | size |\n|---|---|---|---|")
    for name, make in pages.items():
        print(f"| {name} | {' | '.join(timed(make))} |")


if __name__ == "__main__":
    main()
