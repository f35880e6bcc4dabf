"""The whole `sensorgrade inspect`, real frames included, under faults of disks, rights and time."""

import os
import signal
import subprocess
import sys
import time
from collections.abc import Iterator
from pathlib import Path

import pytest

from faults.command_line import Answer, run
from faults.small_sensors import write_lot, write_recipe, write_sensor
from lot.fakes import tree
from sensorgrade.errors import RequestError
from sensorgrade.lot import ledger as ledger_module
from sensorgrade.lot.ledger import read_ledger

DEVICES = 3
LIMITED = ["setpriv", "--bounding-set=-dac_override,-dac_read_search"]  # root without its rights
COMMAND = [sys.executable, "-c", "from sensorgrade.cli.main import main; main()"]


@pytest.fixture(scope="module")
def bench(tmp_path_factory) -> Path:
    """A lot of frames ``in``, its ``recipe.yaml``, and ``out`` of a run without any trouble."""
    folder = tmp_path_factory.mktemp("bench")
    write_lot(folder / "in", DEVICES)
    write_recipe(folder / "recipe.yaml")
    assert inspected(folder, folder / "out").status == 1
    return folder


def arguments(bench: Path, out: Path, *more: str) -> list[str]:
    recipe = bench / "recipe.yaml"
    return ["inspect", str(bench / "in"), "--recipe", str(recipe), "--out", str(out), *more]


def inspected(bench: Path, out: Path, *more: str) -> Answer:
    """One run in this process, with two workers."""
    answer = run(*arguments(bench, out, "--jobs", "2", *more))
    assert "Traceback" not in answer.err
    return answer


def started(bench: Path, out: Path, *more: str) -> subprocess.Popen[str]:
    """One run as a program of its own."""
    return subprocess.Popen(
        [*COMMAND, *arguments(bench, out, "--jobs", "2", *more)],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        start_new_session=True,
    )


def limited(*given: object, **environment: str) -> subprocess.CompletedProcess[str]:
    """One command as a user who may not do everything."""
    prefix = LIMITED if os.geteuid() == 0 else []
    return subprocess.run(
        [*prefix, *COMMAND, *map(str, given)],
        capture_output=True,
        text=True,
        check=False,
        env=os.environ | environment,
    )


@pytest.fixture
def rights() -> None:
    """Skips where root cannot lay down its rights."""
    if os.geteuid() == 0 and subprocess.run([*LIMITED, "true"], check=False).returncode:
        pytest.skip("no setpriv that lays down root's rights")


@pytest.fixture
def disk(tmp_path) -> Iterator[Path]:
    """A file system of its own, which only root can make."""
    folder = tmp_path / "disk"
    folder.mkdir()
    made = subprocess.run(
        ["mount", "-t", "tmpfs", "-o", "size=10m", "tmpfs", str(folder)],
        capture_output=True,
        check=False,
    )
    if made.returncode:
        pytest.skip("no permission to mount a small file system")
    try:
        yield folder
    finally:
        subprocess.run(["umount", "--lazy", str(folder)], check=True)


def remounted(disk: Path, how: str) -> None:
    subprocess.run(["mount", "-o", f"remount,{how}", str(disk)], check=True)


def whole_or_absent(out: Path, expected: dict[str, bytes]) -> None:
    """Nothing under a final name but what an undisturbed run leaves; the ledger can be read."""
    for name, content in tree(out).items():
        if "/" in name and not name.startswith("."):
            assert content == expected[name], name
    if (out / "lot.sqlite").exists():
        try:
            with read_ledger(out) as ledger:
                assert list(ledger.select("PRAGMA integrity_check")) == [("ok",)]
        except RequestError as error:
            assert "its run ended before it could begin" in str(error)
            assert not [name for name in tree(out) if "/" in name]


def finished(bench: Path, out: Path, expected: dict[str, bytes]) -> None:
    """The same command once more does what is left, to the byte."""
    assert inspected(bench, out).status == 1
    assert tree(out) == expected
    assert not [path for path in out.iterdir() if path.name.startswith((".", "lot.sqlite-"))]


@pytest.mark.parametrize(
    "kilobytes",
    [
        *(250, 700, 1000),
        *(pytest.param(size, marks=pytest.mark.nightly) for size in range(60, 1400, 80)),
    ],
)
def test_a_disk_that_fills_loses_nothing(bench, disk, kilobytes):
    expected = tree(bench / "out")
    remounted(disk, f"size={kilobytes}k")
    out = disk / "out"
    answer = inspected(bench, out)
    if answer.status in (2, 3):
        assert "space" in answer.err or "full" in answer.err
    else:
        assert {name: c for name, c in tree(out).items() if "sqlite" not in name} == expected
    whole_or_absent(out, expected)
    remounted(disk, "size=10m")
    finished(bench, out, expected)


def test_a_read_only_disk_is_told_and_left_alone(bench, disk):
    out = disk / "out"
    inspected(bench, out)
    expected = tree(out)
    remounted(disk, "ro")
    for folder in (out, disk / "other", disk / "deep" / "other"):
        answer = inspected(bench, folder)
        assert answer.status == 2
        assert "cannot be written (Read-only file system); give another --out" in answer.err
    assert tree(out) == expected


@pytest.mark.parametrize("name", ["out", "out/deeper"])
def test_a_file_in_the_place_of_out_is_told(bench, tmp_path, name):
    (tmp_path / "out").write_text("a user's own file")
    answer = inspected(bench, tmp_path / name)
    assert answer.status == 2
    assert "cannot be written" in answer.err
    assert (tmp_path / "out").read_text() == "a user's own file"


def test_an_out_that_may_not_be_written_is_told(bench, tmp_path, rights):
    (tmp_path / "out").mkdir(mode=0o555)
    for out in (tmp_path / "out", tmp_path / "out" / "deeper" / "still"):
        found = limited(*arguments(bench, out))
        assert found.returncode == 2
        assert "cannot be written (Permission denied); give another --out" in found.stderr
        assert len(found.stderr.splitlines()) == 1


def test_frames_and_folders_that_may_not_be_read_cost_only_themselves(tmp_path, rights):
    write_lot(tmp_path / "in", 3)
    write_recipe(tmp_path / "recipe.yaml")
    (tmp_path / "in" / "S0" / "bias_00.fits").chmod(0)
    (tmp_path / "in" / "S1").chmod(0)
    found = limited(*arguments(tmp_path, tmp_path / "out"), "--json")
    (tmp_path / "in" / "S1").chmod(0o755)
    assert found.returncode == 3
    with read_ledger(tmp_path / "out") as ledger:
        (failure,) = ledger.failures()
        results = {result.serial: result for result in ledger.results()}
    assert (failure.serial, sorted(results)) == ("S1", ["S0", "S2"])
    assert "S1: cannot be read: permission denied; make it readable" in failure.reason
    told = {one.where: one.seen for one in results["S0"].findings}
    assert told["S0/bias_00.fits"] == "cannot be read: permission denied; it was left out"


def test_a_user_who_can_keep_no_compiled_code_is_served_all_the_same(tmp_path, rights):
    """As in a container: the package belongs to somebody else, and there is no home."""
    package = Path(ledger_module.__file__).parents[1]
    copy = tmp_path / "sensorgrade"
    subprocess.run(["cp", "-r", str(package), str(copy)], check=True)
    for folder in [copy, *(path for path in copy.rglob("*") if path.is_dir())]:
        if folder.name == "__pycache__":
            subprocess.run(["rm", "-r", str(folder)], check=True)
        else:
            folder.chmod(0o555)
    program = (
        "import numpy, sensorgrade.kernels.overscan as k; print(k.__file__);"
        "from sensorgrade.kernels import combine"
    )
    found = subprocess.run(
        [*(LIMITED if os.geteuid() == 0 else []), sys.executable, "-c", program],
        capture_output=True,
        text=True,
        check=False,
        env=os.environ | {"HOME": "/proc/nowhere", "PYTHONPATH": str(tmp_path)},
    )
    for folder in [copy, *(path for path in copy.rglob("*") if path.is_dir())]:
        folder.chmod(0o755)
    assert found.stderr == ""
    assert found.stdout.startswith(str(copy))


@pytest.fixture
def vanishing(monkeypatch):
    """Have something done to the frames once they are found, or once they are audited."""

    def at(module: str, name: str, do) -> None:
        import importlib

        home = importlib.import_module(module)
        usual = getattr(home, name)

        def wrapped(*given, **named):
            result = usual(*given, **named)
            do()
            return result

        monkeypatch.setattr(home, name, wrapped)

    return at


@pytest.mark.parametrize("how", ["gone", "cut"])
@pytest.mark.parametrize(
    ("module", "name", "status", "sentence"),
    [
        ("sensorgrade.frames.inventory", "find_devices", 0, None),
        ("sensorgrade.inspection", "audited", 3, "flat_17.fits"),
    ],
)
def test_a_frame_that_goes_in_the_middle_is_told(
    tmp_path, vanishing, how, module, name, status, sentence
):
    write_sensor(tmp_path / "in" / "S0", "S0")
    write_recipe(tmp_path / "recipe.yaml")
    frame = tmp_path / "in" / "S0" / "flat_17.fits"

    def spoil() -> None:
        if how == "gone":
            frame.unlink(missing_ok=True)
        else:
            frame.write_bytes(frame.read_bytes()[:3000])

    vanishing(module, name, spoil)
    out = tmp_path / "out"
    answer = run(*arguments(tmp_path, out))
    assert answer.status == status, answer
    assert "Traceback" not in answer.err
    with read_ledger(out) as ledger:
        if sentence is None:
            (result,) = ledger.results()
            (finding,) = [one for one in result.findings if one.severity == "error"]
            assert finding.where == "S0/flat_17.fits"
            assert finding.seen.startswith("unreadable: ")
        else:
            (failure,) = ledger.failures()
            assert sentence in failure.reason
            assert failure.trace is None or how == "gone"
            assert not (out / "S0").exists()


def test_all_frames_of_a_device_that_go_in_the_middle_cost_only_that_device(tmp_path, vanishing):
    write_lot(tmp_path / "in", 3)
    write_recipe(tmp_path / "recipe.yaml")

    def spoil() -> None:
        for path in (tmp_path / "in" / "S1").iterdir():
            path.unlink()

    vanishing("sensorgrade.frames.inventory", "find_devices", spoil)
    answer = inspected(tmp_path, tmp_path / "out")
    assert answer.status == 3
    with read_ledger(tmp_path / "out") as ledger:
        assert [one.serial for one in ledger.results()] == ["S0", "S2"]
        (failure,) = ledger.failures()
    assert "S1" in failure.reason and "No such file" in failure.reason


def test_two_runs_on_one_out_and_an_end_by_sigterm(tmp_path):
    """The second is refused by name; the first, ended, is gone on with to the byte."""
    write_lot(tmp_path / "in", 8)
    write_recipe(tmp_path / "recipe.yaml")
    inspected(tmp_path, tmp_path / "expected" / "out")
    out = tmp_path / "out"
    first = started(tmp_path, out)
    assert first.stderr is not None
    first.stderr.readline()  # devices are at work from here on
    second = inspected(tmp_path, out)
    assert second.status == 2
    assert f"in use by another run (process {first.pid} on" in second.err
    first.send_signal(signal.SIGTERM)
    _, error = first.communicate(timeout=60)
    assert first.returncode == 3, error
    assert "give the same command again to go on" in error
    whole_or_absent(out, tree(tmp_path / "expected" / "out"))
    finished(tmp_path, out, tree(tmp_path / "expected" / "out"))


def test_a_clock_that_jumps_changes_no_result_and_repeats_no_device(bench, tmp_path, monkeypatch):
    out = tmp_path / "out"
    times = iter(["2031-01-01T00:00:00.000Z", "1970-01-01T00:00:00.000Z"] * 20)
    monkeypatch.setattr(ledger_module, "_now", lambda: next(times))
    monkeypatch.setattr(time, "time", lambda: 86400.0)
    assert inspected(bench, out).status == 1
    assert tree(out) == tree(bench / "out")
    before = {path: path.stat().st_mtime_ns for path in out.rglob("result.json")}
    for path in out.rglob("*.fits"):
        os.utime(path, (0, 0))
    assert inspected(bench, out).status == 1
    assert {path: path.stat().st_mtime_ns for path in out.rglob("result.json")} == before
    with read_ledger(out) as ledger:
        assert [one.ending for one in ledger.runs()] == ["finished", "finished"]


@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM])
def test_a_watch_takes_devices_as_they_become_complete_and_ends_on_request(tmp_path, number):
    write_sensor(tmp_path / "in" / "S0", "S0")
    write_recipe(tmp_path / "recipe.yaml")
    out = tmp_path / "out"
    watch = started(tmp_path, out, "--watch", "--marker", "done.txt", "--json")
    assert watch.stdout is not None
    (tmp_path / "in" / "S0" / "done.txt").touch()
    write_sensor(tmp_path / "in" / "S1", "S1")  # not complete
    while watch.stdout.readline() not in ("}\n", ""):
        pass
    assert not (out / "S1").exists()
    watch.send_signal(number)
    _, error = watch.communicate(timeout=60)
    assert watch.returncode == 0, error
    last = error.splitlines()[-1]
    assert last == (
        "sensorgrade: watch stopped on request; what is done is kept, give the same command again"
        " to go on"
    )
    assert not [path for path in out.iterdir() if path.name.startswith((".", "lot.sqlite-"))]
    with read_ledger(out) as ledger:
        assert [one.serial for one in ledger.results()] == ["S0"]


@pytest.mark.nightly
def test_runs_that_start_together_share_compiled_code_and_agree_to_the_byte(
    bench, tmp_path, monkeypatch
):
    monkeypatch.setenv("NUMBA_CACHE_DIR", str(tmp_path / "kernels"))
    runs = [started(bench, tmp_path / f"{number}" / "out") for number in range(4)]
    for run_ in runs:
        _, error = run_.communicate(timeout=300)
        assert run_.returncode == 1, error
        assert "Traceback" not in error
    expected = tree(bench / "out")
    for number in range(4):
        assert tree(tmp_path / f"{number}" / "out") == expected
    assert list((tmp_path / "kernels").rglob("*.nbi"))
