"""kill -9 at random moments: what was done stays, what was not is done again, to the byte."""

import os
import random
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest

from lot.fakes import tree
from lot.killed import DEVICES
from sensorgrade.lot.ledger import read_ledger

TESTS = Path(__file__).parents[1]


def started(source: Path, out: Path, *, seconds: float = 0.1) -> subprocess.Popen[str]:
    """A run of devices that take so long each, in a session of its own."""
    return subprocess.Popen(
        [sys.executable, "-m", "lot.killed", str(source), str(out), str(seconds)],
        cwd=TESTS,
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        start_new_session=True,
    )


def ended(run: subprocess.Popen[str]) -> str:
    try:
        out, _ = run.communicate(timeout=60)
    except BaseException:
        os.killpg(run.pid, signal.SIGKILL)
        run.communicate()
        raise
    return out


def workers(run: subprocess.Popen[str]) -> list[int]:
    """The run's own children that inspect devices."""
    found = []
    for path in Path("/proc").glob("[0-9]*"):
        try:
            fields = (path / "stat").read_text().rpartition(")")[2].split()
            line = (path / "cmdline").read_bytes()
        except OSError:
            continue
        if int(fields[3]) == run.pid and int(path.name) != run.pid and b"LokyProcess" in line:
            found.append(int(path.name))
    return sorted(found)


@pytest.fixture(scope="module")
def undisturbed(tmp_path_factory):
    """The source, what a run without trouble leaves, and how long that took after its start."""
    folder = tmp_path_factory.mktemp("undisturbed")
    run = started(folder / "in", folder / "out")
    assert run.stdout is not None
    run.stdout.readline()
    begin = time.monotonic()
    ended(run)
    assert run.returncode == 0
    return folder / "in", tree(folder / "out"), time.monotonic() - begin


def checked_after_resume(source: Path, out: Path, expected: dict[str, bytes]) -> None:
    run = started(source, out)
    ended(run)
    assert run.returncode == 0
    assert tree(out) == expected
    assert not [path for path in out.iterdir() if path.name.startswith((".", "lot.sqlite-"))]
    with read_ledger(out) as ledger:
        assert len(ledger.results()) == DEVICES
        assert ledger.failures() == []
        assert list(ledger.select("SELECT * FROM moving")) == []
        assert list(ledger.select("PRAGMA integrity_check")) == [("ok",)]


def gone(run: subprocess.Popen[str]) -> bool:
    """Whether the workers of a dead run end by themselves within a few seconds."""
    for _ in range(100):
        if not workers(run):
            return True
        time.sleep(0.1)
    return False


@pytest.mark.parametrize(
    "seed", [*range(4), *(pytest.param(s, marks=pytest.mark.nightly) for s in range(4, 100))]
)
def test_kill_9_at_any_moment_loses_nothing(tmp_path, undisturbed, seed):
    source, expected, seconds = undisturbed
    chance = random.Random(seed)
    out = tmp_path / "out"
    run = started(source, out)
    assert run.stdout is not None
    run.stdout.readline()  # devices are at work from here on
    time.sleep(chance.uniform(0, seconds))
    if seed % 2:
        victims = workers(run)
        if victims:
            os.kill(chance.choice(victims), signal.SIGKILL)
        ended(run)
        assert run.returncode == 0
    else:
        run.kill()
        ended(run)
        assert gone(run)
    checked_after_resume(source, out, expected)


def test_kill_9_of_a_run_before_it_has_begun_and_of_one_that_goes_on(tmp_path, undisturbed):
    source, expected, _ = undisturbed
    for delay in (0.2, 0.6, 0.9, 1.2):
        run = started(source, tmp_path / "out")
        time.sleep(delay)
        run.kill()
        ended(run)
    checked_after_resume(source, tmp_path / "out", expected)


def test_sigterm_and_a_second_run_on_the_same_folder(tmp_path):
    source, out = tmp_path / "in", tmp_path / "out"
    run = started(source, out, seconds=0.8)
    assert run.stdout is not None
    for _ in range(2):
        run.stdout.readline()
    second = started(source, out, seconds=0.8)
    _, error = second.communicate(timeout=60)
    assert second.returncode == 1
    assert f"in use by another run (process {run.pid} on" in error
    run.terminate()
    ended(run)
    assert run.returncode == 3
    with read_ledger(out) as ledger:
        done = len(ledger.results())
        assert 1 <= done < DEVICES
        assert ledger.runs()[-1].ending == "stopped"
    assert sorted(path.name for path in out.iterdir())[done:] == ["lot.sqlite"]


@pytest.mark.parametrize("lines", [1, 3])
def test_workers_do_not_outlive_a_run_that_was_killed(tmp_path, undisturbed, lines):
    source, _, _ = undisturbed
    run = started(source, tmp_path / "out")
    assert run.stdout is not None
    for _ in range(lines):
        run.stdout.readline()
    run.kill()
    run.wait()
    assert gone(run)
    ended(run)


@pytest.mark.parametrize("delay", [0.0, 0.1, 0.2, 0.4, 1.0])
def test_ctrl_c_for_the_whole_group_of_processes_says_nothing_but_how_to_go_on(tmp_path, delay):
    run = started(tmp_path / "in", tmp_path / "out", seconds=0.3)
    assert run.stdout is not None
    run.stdout.readline()
    time.sleep(delay)
    os.killpg(run.pid, signal.SIGINT)
    _, error = run.communicate(timeout=60)
    assert error == ""
    assert run.returncode == 3
