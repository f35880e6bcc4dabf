"""Disks that are full, read-only or taken away: no half file under a final name, nothing lost."""

import os
import subprocess
from collections.abc import Iterator
from pathlib import Path

import pytest

from lot.fakes import RECIPE, fake_devices, tree, well
from sensorgrade.errors import RequestError
from sensorgrade.frames.frame import DeviceFrames
from sensorgrade.lot.engine import LotOptions, LotOutcome, run_folder, run_lot
from sensorgrade.lot.ledger import read_ledger

DEVICES = 6


def run(out: Path, devices: list[DeviceFrames]) -> LotOutcome:
    with run_folder(out) as ledger:
        return run_lot(devices, well, ledger=ledger, recipe=RECIPE, options=LotOptions(jobs=2))


@pytest.fixture
def disk(tmp_path) -> Iterator[Path]:
    """A file system of its own, which only root can make."""
    folder = tmp_path / "disk"
    folder.mkdir()
    made = subprocess.run(
        ["mount", "-t", "tmpfs", "-o", "size=64k", "tmpfs", str(folder)],
        capture_output=True,
        check=False,
    )
    if made.returncode:
        pytest.skip("no permission to mount a small file system")
    try:
        yield folder
    finally:
        subprocess.run(["umount", "--lazy", str(folder)], check=True)


def resized(disk: Path, size: str) -> None:
    subprocess.run(["mount", "-o", f"remount,{size}", str(disk)], check=True)


@pytest.mark.parametrize(
    "kilobytes",
    [
        *(100, 404, 752),
        *(pytest.param(size, marks=pytest.mark.nightly) for size in range(128, 1400, 72)),
    ],
)
def test_a_full_disk_loses_nothing_and_leaves_nothing_half_done(tmp_path, disk, kilobytes):
    devices = fake_devices(tmp_path / "in", *["well"] * DEVICES)
    run(tmp_path / "expected", devices)
    expected = tree(tmp_path / "expected")
    resized(disk, f"size={kilobytes}k")
    out = disk / "out"
    done = 0
    try:
        outcome = run(out, devices)
        done = outcome.inspected
        assert outcome.failed == 0
        assert outcome.stopped is not None or done == DEVICES
    except RequestError as error:
        assert "space" in str(error) or "full" in str(error)
    for name, content in tree(out).items():
        if not name.startswith("lot.sqlite"):
            assert content == expected[name]
    resized(disk, "size=10m")
    if done:
        with read_ledger(out) as ledger:
            assert len(ledger.results()) == done
            assert list(ledger.select("PRAGMA integrity_check")) == [("ok",)]
    again = run(out, devices)
    assert (again.kept, again.inspected, again.exit_status) == (done, DEVICES - done, 0)
    assert tree(out) == expected


def test_a_read_only_disk_is_told_before_any_work(tmp_path, disk):
    devices = fake_devices(tmp_path / "in", "well")
    resized(disk, "size=10m")
    run(disk / "out", devices)
    resized(disk, "ro")
    with pytest.raises(RequestError, match="cannot be written"):
        run(disk / "out", devices)
    with pytest.raises(RequestError, match="cannot be written"):
        run(disk / "other", devices)
    with read_ledger(disk / "out") as ledger:  # but what is there can be read
        assert len(ledger.results()) == 1


def test_a_folder_that_is_a_file_is_told(tmp_path):
    (tmp_path / "out").write_text("")
    with pytest.raises(RequestError, match="cannot be written"):
        run(tmp_path / "out", [])


def test_a_file_in_place_of_a_devices_folder_fails_that_device_alone(tmp_path):
    devices = fake_devices(tmp_path / "in", "well", "well")
    (tmp_path / "out").mkdir()
    (tmp_path / "out" / "S00000").write_text("a user's own file")
    outcome = run(tmp_path / "out", devices)
    assert (outcome.inspected, outcome.failed) == (1, 1)
    assert (tmp_path / "out" / "S00000").read_text() == "a user's own file"


@pytest.mark.skipif(os.name != "posix", reason="needs permissions")
def test_a_file_that_cannot_be_replaced_fails_that_device_alone(tmp_path):
    devices = fake_devices(tmp_path / "in", "well", "well")
    (tmp_path / "out" / "S00000" / "mask.fits").mkdir(parents=True)
    outcome = run(tmp_path / "out", devices)
    assert (outcome.inspected, outcome.failed) == (1, 1)
    with read_ledger(tmp_path / "out") as ledger:
        (failure,) = ledger.failures()
    assert "mask.fits" in failure.reason
