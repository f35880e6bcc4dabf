"""Every command that README and guides show is run, in a folder where what it names exists."""

import re
import shlex
import shutil
from dataclasses import replace
from pathlib import Path

import pytest
from click.testing import CliRunner

from sensorgrade.cli.main import command
from sensorgrade.guides.topics import TOPICS, guide_text
from sensorgrade.recipe.load import load_options
from sensorgrade.simulate.lot import Simulation, find_model, write_lot

ROOT = Path(__file__).parents[2]
BLOCK = re.compile(r"^ *```(?:sh|text)\n(.*?)^ *```$", re.MULTILINE | re.DOTALL)
# These wait for a bench or a cluster; tests/lot has both.
ELSEWHERE = ("--watch", "--cluster")


def shown(text):
    for block in BLOCK.findall(text):
        for line in block.splitlines():
            if line.strip().startswith("sensorgrade ") and not any(e in line for e in ELSEWHERE):
                yield line.strip()


COMMANDS = {"README": list(shown((ROOT / "README.md").read_text()))} | {
    topic: found for topic in TOPICS if (found := list(shown(guide_text(topic))))
}


@pytest.fixture(scope="module")
def bench(tmp_path_factory):
    """Frames of two devices, runs of them, and the files that the commands name."""
    folder = tmp_path_factory.mktemp("bench")
    simulation = load_options(find_model("two-output-ccd"), Simulation)
    stacks = [replace(one, frames=min(one.frames, 3)) for one in simulation.plan.stacks]
    write_lot(
        replace(simulation, plan=replace(simulation.plan, stacks=tuple(stacks))),
        folder / "frames",
        devices=2,
    )
    for number in (1, 2):
        serial = f"SIM-000{number}"
        shutil.copytree(folder / "frames" / serial, folder / f"bench-{number}" / serial)
    with pytest.MonkeyPatch.context() as patch:
        patch.chdir(folder)
        run("sensorgrade inspect frames --recipe two-output-ccd --out lot")
        run("sensorgrade recipes draft frames --out drafted.yaml")
    for name in ("lot-17-after-cycling", "lot-a1", "lot-a2", "lot-b1", "lot-b2"):
        shutil.copytree(folder / "lot", folder / name)
    (folder / "lot" / "SIM-0001").rename(folder / "lot" / "0001")
    shutil.copy(folder / "drafted.yaml", folder / "mine.yaml")
    (folder / "tighter.yaml").write_text("grades:\n  best:\n    read_noise: <= 4.2 electron\n")
    return folder


def run(line):
    words = shlex.split(line.partition(">")[0] if " > " in line else line)[1:]
    done = CliRunner().invoke(command, words)
    assert done.exception is None or isinstance(done.exception, SystemExit), (line, done.exception)
    assert done.exit_code in (0, 1), (line, done.output)
    return done.output


@pytest.mark.parametrize("place", COMMANDS)
def test_the_commands_shown_do_what_they_are_shown_for(place, bench, monkeypatch):
    monkeypatch.chdir(bench)
    if place == "README":  # it drafts the recipe itself
        (bench / "mine.yaml").unlink()
    for line in COMMANDS[place]:
        assert run(line), line
