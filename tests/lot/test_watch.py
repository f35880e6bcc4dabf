import os
from collections.abc import Callable, Iterator
from pathlib import Path

import pytest

from lot.fakes import fake_device
from sensorgrade.errors import RequestError
from sensorgrade.frames.frame import DeviceFrames
from sensorgrade.lot import watch
from sensorgrade.lot.watch import completed


class Bench:
    """Time that passes only while the watch sleeps; at each sleep the bench does its next step."""

    def __init__(self, source: Path, *steps: Callable[[], object]) -> None:
        self.source = source
        self.steps = list(steps)
        self.now = 100.0
        self.complaints: list[str] = []

    def monotonic(self) -> float:
        return self.now

    def sleep(self, seconds: float) -> None:
        self.now += seconds
        if not self.steps:
            raise KeyboardInterrupt
        self.steps.pop(0)()

    def find(self) -> list[DeviceFrames]:
        found = [
            fake_device(self.source, int(folder.name[1:]))
            for folder in sorted(self.source.iterdir())
            if len(list(folder.glob("*.raw"))) == 3
        ]
        if not found:
            raise RequestError("holds no frames")
        return found

    def watched(self, **options: object) -> Iterator[list[str]]:
        for batch in completed(
            [self.source],
            self.find,
            every=10.0,
            complain=self.complaints.append,
            **options,  # type: ignore[arg-type]
        ):
            yield [device.serial for device in batch]


@pytest.fixture
def bench(tmp_path, monkeypatch):
    source = tmp_path / "in"
    source.mkdir()
    bench = Bench(source)
    monkeypatch.setattr(watch, "time", bench)
    return bench


def gathered(bench: Bench, **options: object) -> list[list[str]]:
    found: list[list[str]] = []
    with pytest.raises(KeyboardInterrupt):
        for batch in bench.watched(**options):
            found.append(batch)  # noqa: PERF402
    return found


def nothing() -> None:
    pass


def test_a_device_is_taken_when_its_files_have_been_quiet_long_enough(bench):
    first, second = (bench.source / f"S0000{n}" for n in (1, 2))
    bench.steps = [
        lambda: fake_device(bench.source, 1),
        nothing,
        lambda: (first / "frame_2.raw").write_text("longer than before"),
        lambda: fake_device(bench.source, 2),
        *[nothing] * 6,
    ]
    found = gathered(bench, quiet=25.0)
    assert found == [["S00001"], ["S00002"]]
    assert second.exists()


def test_a_device_with_a_marker_is_taken_at_once_and_one_without_never(bench):
    bench.steps = [
        lambda: (fake_device(bench.source, 1), fake_device(bench.source, 2)),
        lambda: (bench.source / "S00002" / "DONE").touch(),
        *[nothing] * 5,
    ]
    assert gathered(bench, marker="DONE") == [["S00002"]]


def test_a_device_that_gets_more_frames_later_is_taken_again(bench):
    fake_device(bench.source, 1)
    bench.steps = [
        *[nothing] * 2,
        lambda: (bench.source / "S00001" / "frame_1.raw").write_text("a longer text"),
        *[nothing] * 5,
    ]
    assert gathered(bench, quiet=15.0) == [["S00001"], ["S00001"]]


def test_files_whose_clock_jumps_back_are_new_all_the_same(bench):
    fake_device(bench.source, 1)
    path = bench.source / "S00001" / "frame_1.raw"
    bench.steps = [*[nothing] * 2, lambda: os.utime(path, (0, 0)), *[nothing] * 5]
    assert gathered(bench, quiet=15.0) == [["S00001"], ["S00001"]]


def test_trouble_is_told_and_the_watch_goes_on(bench):
    (bench.source / "S00001").mkdir()
    (bench.source / "S00001" / "frame_0.raw").write_text("x")
    bench.steps = [*[nothing] * 3, lambda: fake_device(bench.source, 2), *[nothing] * 4]
    assert gathered(bench, quiet=15.0) == [["S00002"]]
    assert bench.complaints == ["holds no frames"]


def test_a_source_that_is_not_there_is_refused_at_once(bench, tmp_path):
    with pytest.raises(RequestError, match="no such source"):
        next(completed([tmp_path / "absent"], bench.find, complain=print))
