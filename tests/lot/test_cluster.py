"""A Dask scheduler and workers as one starts them by hand, each a process of its own."""

import contextlib
import json
import os
import signal
import subprocess
import sys
import threading
import time
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path

import pytest

from lot.fakes import RECIPE, fake_devices, tree, well
from sensorgrade.errors import RequestError
from sensorgrade.frames.frame import DeviceFrames
from sensorgrade.lot.cluster import connected
from sensorgrade.lot.engine import LotOptions, LotOutcome, run_folder, run_lot
from sensorgrade.lot.ledger import read_ledger

pytest.importorskip("distributed")

TESTS = Path(__file__).parents[1]


class Site:
    """A scheduler with some workers on this machine."""

    def __init__(self, folder: Path) -> None:
        self._folder = folder
        self._processes: list[subprocess.Popen[bytes]] = []
        self.address = ""

    def start(self, *arguments: str) -> subprocess.Popen[bytes]:
        process = subprocess.Popen(
            [sys.executable, "-m", "dask", *arguments],
            env=os.environ | {"PYTHONPATH": str(TESTS)},
            stdout=subprocess.DEVNULL,
            stderr=subprocess.DEVNULL,
            start_new_session=True,
        )
        self._processes.append(process)
        return process

    def scheduler(self) -> None:
        file = self._folder / "scheduler.json"
        self.start(
            "scheduler", "--port", "0", "--host", "127.0.0.1", "--no-dashboard",
            "--scheduler-file", str(file),
        )  # fmt: skip
        for _ in range(200):
            if file.exists() and file.read_text():
                self.address = json.loads(file.read_text())["address"]
                return
            time.sleep(0.1)
        raise AssertionError("the scheduler did not start")

    def worker(self, name: str) -> subprocess.Popen[bytes]:
        return self.start(
            "worker", self.address, "--nthreads", "1", "--name", name, "--no-dashboard",
            "--local-directory", str(self._folder / name),
        )  # fmt: skip

    def wait(self, count: int) -> None:
        from distributed import Client

        with Client(self.address, set_as_default=False) as client:
            client.wait_for_workers(count, timeout=60)

    def stop(self) -> None:
        for process in reversed(self._processes):
            with contextlib.suppress(ProcessLookupError):
                os.killpg(process.pid, signal.SIGKILL)
            process.wait()


@pytest.fixture(scope="module")
def site(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Site]:
    site = Site(tmp_path_factory.mktemp("site"))
    try:
        site.scheduler()
        for name in ("a", "b"):
            site.worker(name)
        site.wait(2)
        yield site
    finally:
        site.stop()


def run(out: Path, devices: list[DeviceFrames], **options: object) -> LotOutcome:
    with run_folder(out) as ledger:
        return run_lot(
            devices,
            well,
            ledger=ledger,
            recipe=RECIPE,
            options=LotOptions(**options),  # type: ignore[arg-type]
        )


def test_the_cluster_leaves_the_same_bytes_as_this_machine(tmp_path, site):
    devices = fake_devices(tmp_path / "in", "well", "refuses", "well", "breaks", "well")
    here = run(tmp_path / "here", devices, jobs=2)
    there = run(tmp_path / "there", devices, cluster=site.address)
    assert tree(tmp_path / "here") == tree(tmp_path / "there")
    assert replace(here, seconds=0) == replace(there, seconds=0)


def test_sources_given_by_relative_paths_are_found_by_workers_elsewhere(
    tmp_path, site, monkeypatch
):
    monkeypatch.chdir(tmp_path)
    devices = fake_devices(Path("in"), "well")
    assert not devices[0].frames[0].path.is_absolute()
    assert run(Path("out"), devices, cluster=site.address).exit_status == 0


def test_a_worker_killed_in_the_middle_costs_no_device(tmp_path, site):
    devices = fake_devices(tmp_path / "in", *["slow 0.5"] * 10)
    run(tmp_path / "here", devices, jobs=2)
    victim = site.worker("victim")
    site.wait(3)
    timer = threading.Timer(0.8, os.killpg, (victim.pid, signal.SIGKILL))
    timer.start()
    outcome = run(tmp_path / "there", devices, cluster=site.address)
    timer.join()
    assert victim.wait() == -signal.SIGKILL
    assert (outcome.inspected, outcome.failed) == (10, 0)
    assert tree(tmp_path / "here") == tree(tmp_path / "there")


def test_a_device_that_kills_worker_after_worker_is_given_up(tmp_path, site):
    devices = fake_devices(tmp_path / "in", "dies", "well", "well", "well")
    outcome = run(tmp_path / "out", devices, cluster=site.address)
    assert (outcome.inspected, outcome.failed) == (3, 1)
    with read_ledger(tmp_path / "out") as ledger:
        (failure,) = ledger.failures()
    assert failure.serial == "S00000"
    assert "no worker of the cluster could inspect it (in stage read)" in failure.reason


def test_a_device_that_hangs_is_ended_on_the_cluster_too(tmp_path, site):
    devices = fake_devices(tmp_path / "in", "hangs", "well", "well")
    outcome = run(tmp_path / "out", devices, cluster=site.address, time_limit=1.0)
    assert (outcome.inspected, outcome.failed) == (2, 1)
    with read_ledger(tmp_path / "out") as ledger:
        (failure,) = ledger.failures()
    assert "did not end within the limit of 1 s (in stage wait for ever)" in failure.reason


def test_a_folder_that_the_workers_do_not_see_is_refused(site):
    with (
        connected(site.address, time_limit=None) as cluster,
        pytest.raises(RequestError, match="does not see /nowhere"),
    ):
        next(cluster.attempts({}, well, Path("/nowhere/place")))


def test_an_address_where_nobody_answers_is_told(tmp_path, monkeypatch):
    monkeypatch.setattr("sensorgrade.lot.cluster.CONNECT", 0.5)
    devices = fake_devices(tmp_path / "in", "well")
    with pytest.raises(RequestError, match="no Dask scheduler answers"):
        run(tmp_path / "out", devices, cluster="tcp://127.0.0.1:9")
    assert [path.name for path in (tmp_path / "out").iterdir()] == ["lot.sqlite"]
