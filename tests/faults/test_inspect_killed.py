"""kill -9 of a whole `sensorgrade inspect` or of one worker: the next run gives the same bytes."""

import os
import random
import signal
import time

import pytest

from faults.small_sensors import write_lot, write_recipe
from faults.test_inspect_faults import finished, inspected, started, whole_or_absent
from lot.fakes import tree
from lot.test_kill import ended, gone, workers

DEVICES = 10


@pytest.fixture(scope="module")
def undisturbed(tmp_path_factory):
    """The bench, what a run without trouble leaves, and how long its devices took."""
    bench = tmp_path_factory.mktemp("undisturbed")
    write_lot(bench / "in", DEVICES)
    write_recipe(bench / "recipe.yaml")
    inspected(bench, bench / "warm")  # compiled code is there from here on
    run = started(bench, bench / "out")
    assert run.stderr is not None
    run.stderr.readline()
    begin = time.monotonic()
    ended(run)
    assert run.returncode == 1
    return bench, tree(bench / "out"), time.monotonic() - begin


@pytest.mark.parametrize(
    "seed", [*range(2), *(pytest.param(s, marks=pytest.mark.nightly) for s in range(2, 100))]
)
def test_a_kill_at_any_moment_loses_nothing(tmp_path, undisturbed, seed):
    bench, expected, seconds = undisturbed
    chance = random.Random(seed)
    out = tmp_path / "out"
    run = started(bench, out)
    assert run.stderr is not None
    run.stderr.readline()  # devices are at work from here on
    time.sleep(chance.uniform(0, seconds))
    victims = workers(run)
    if seed % 2 and victims:
        os.kill(chance.choice(victims), signal.SIGKILL)
        ended(run)
        assert run.returncode == 1
        assert tree(out) == expected
    else:
        run.kill()
        ended(run)
        assert gone(run)
    whole_or_absent(out, expected)
    finished(bench, out, expected)
