import os
import signal
import threading
from dataclasses import replace
from pathlib import Path

import pytest

from lot.fakes import RECIPE, fake_device, fake_devices, tree, well
from sensorgrade.frames.frame import DeviceFrames
from sensorgrade.lot.engine import LotOptions, LotOutcome, run_folder, run_lot
from sensorgrade.lot.ledger import Ledger, read_ledger
from sensorgrade.lot.progress import Progress
from sensorgrade.lot.result_json import read_result
from sensorgrade.recipe.model import Recipe

ONE_AT_A_TIME = {"jobs": 1}


def run(
    out: Path,
    devices: list[DeviceFrames],
    *,
    recipe: Recipe = RECIPE,
    seen: list[Progress] | None = None,
    **options: object,
) -> LotOutcome:
    with run_folder(out) as ledger:
        return run_lot(
            devices,
            well,
            ledger=ledger,
            recipe=recipe,
            options=LotOptions(**options),  # type: ignore[arg-type]
            report=(seen if seen is not None else []).append,
        )


def names_in(folder: Path) -> list[str]:
    return sorted(path.name for path in folder.iterdir())


def failures(out: Path) -> dict[str, str]:
    with read_ledger(out) as ledger:
        return {failure.serial: failure.reason for failure in ledger.failures()}


def test_every_device_is_inspected_and_its_files_come_whole(tmp_path):
    devices = fake_devices(tmp_path / "in", *["well"] * 5)
    outcome = run(tmp_path / "out", devices, jobs=2)
    assert (outcome.inspected, outcome.failed, outcome.kept) == (5, 0, 0)
    assert outcome.stopped is None and outcome.exit_status == 0
    with read_ledger(tmp_path / "out") as ledger:
        results = ledger.results()
        assert [run.ending for run in ledger.runs()] == ["finished"]
    assert [result.serial for result in results] == [device.serial for device in devices]
    for result in results:
        text = (tmp_path / "out" / result.folder / "result.json").read_text()
        assert read_result(text) == result
    assert names_in(tmp_path / "out") == sorted(
        ["lot.sqlite", *(device.folder for device in devices)]
    )


def test_the_number_of_jobs_changes_no_byte(tmp_path):
    devices = fake_devices(tmp_path / "in", *["well"] * 4)
    run(tmp_path / "one", devices, jobs=1)
    run(tmp_path / "two", devices, jobs=2)
    for device in devices:
        run(tmp_path / "each", [device])
    assert tree(tmp_path / "one") == tree(tmp_path / "two") == tree(tmp_path / "each")


def test_one_device_that_cannot_be_inspected_does_not_stop_the_others(tmp_path):
    devices = fake_devices(tmp_path / "in", "well", "refuses", "breaks", "hungry", "dies", "well")
    outcome = run(tmp_path / "out", devices, jobs=2)
    assert (outcome.inspected, outcome.failed) == (2, 4)
    assert outcome.exit_status == 3
    found = failures(tmp_path / "out")
    assert found["S00001"] == "S00001: no flats; take two or more"
    assert "ZeroDivisionError: nobody foresaw this" in found["S00002"]
    assert "memory" in found["S00003"]
    assert "SIGKILL" in found["S00004"] and "in stage read" in found["S00004"]
    with read_ledger(tmp_path / "out") as ledger:
        traces = {failure.serial: failure.trace for failure in ledger.failures()}
    assert "fakes.py" in (traces["S00002"] or "")
    assert traces["S00001"] is None
    assert not (tmp_path / "out" / "S00002").exists()


def test_a_worker_that_was_killed_once_costs_no_device(tmp_path):
    devices = fake_devices(tmp_path / "in", "slow 0.2", "dies-once", "slow 0.2", "well")
    outcome = run(tmp_path / "out", devices, jobs=2)
    assert (outcome.inspected, outcome.failed) == (4, 0)


def test_a_device_that_hangs_is_ended_and_where_it_hung_is_told(tmp_path):
    devices = fake_devices(tmp_path / "in", "hangs", "well", "well")
    outcome = run(tmp_path / "out", devices, jobs=2, time_limit=1.0)
    assert (outcome.inspected, outcome.failed) == (2, 1)
    assert (
        "within the limit of 1 s (in stage wait for ever)" in failures(tmp_path / "out")["S00000"]
    )


def test_a_single_device_that_hangs_is_ended_too(tmp_path):
    outcome = run(tmp_path / "out", fake_devices(tmp_path / "in", "hangs"), time_limit=1.0)
    assert outcome.failed == 1


def test_finished_devices_are_kept_and_failed_ones_tried_again(tmp_path):
    devices = fake_devices(tmp_path / "in", "well", "refuses", "well")
    run(tmp_path / "out", devices)
    before = (tmp_path / "out/S00000/result.json").stat()
    (tmp_path / "in/S00001/frame_1.raw").write_text("well")
    outcome = run(tmp_path / "out", devices)
    assert (outcome.kept, outcome.inspected, outcome.failed) == (2, 1, 0)
    assert outcome.exit_status == 0
    assert (tmp_path / "out/S00000/result.json").stat() == before


def test_fresh_inspects_all_of_them_again(tmp_path):
    devices = fake_devices(tmp_path / "in", "well", "well")
    run(tmp_path / "out", devices)
    outcome = run(tmp_path / "out", devices, fresh=True)
    assert (outcome.kept, outcome.inspected) == (0, 2)


def test_changed_inputs_are_noticed_even_when_size_and_time_are_as_before(tmp_path):
    devices = fake_devices(tmp_path / "in", "well", "well")
    run(tmp_path / "out", devices)
    path = devices[1].frames[2].path
    times = path.stat()
    path.write_text("y" * 100)
    os.utime(path, ns=(times.st_atime_ns, times.st_mtime_ns))
    assert path.stat().st_size == times.st_size
    outcome = run(tmp_path / "out", devices)
    assert (outcome.kept, outcome.inspected) == (1, 1)


def test_a_copy_of_the_inputs_with_other_times_is_known_by_its_content(tmp_path):
    devices = fake_devices(tmp_path / "in", "well", "well")
    run(tmp_path / "out", devices)
    for device in devices:
        for frame in device.frames:
            text = frame.path.read_bytes()
            frame.path.unlink()
            frame.path.write_bytes(text)
    assert run(tmp_path / "out", devices).kept == 2
    with run_folder(tmp_path / "out") as ledger:  # and its new times are remembered
        recorded = ledger.fingerprint_of("S00000")
    assert recorded is not None
    again = run(tmp_path / "out", devices)
    assert again.kept == 2


def test_another_recipe_or_another_word_on_a_frame_means_to_inspect_again(tmp_path):
    devices = fake_devices(tmp_path / "in", "well")
    run(tmp_path / "out", devices)
    assert run(tmp_path / "out", devices, recipe=replace(RECIPE, sha256="00" * 32)).inspected == 1
    run(tmp_path / "out", devices)
    stack = devices[0].stacks[0]
    frames = (replace(stack.frames[0], exposure=2.0), *stack.frames[1:])
    other = replace(devices[0], stacks=(replace(stack, frames=frames),))
    assert run(tmp_path / "out", [other]).inspected == 1


def test_a_device_whose_files_were_taken_away_is_inspected_again(tmp_path):
    devices = fake_devices(tmp_path / "in", "well")
    run(tmp_path / "out", devices)
    (tmp_path / "out/S00000/mask.fits").unlink()
    assert run(tmp_path / "out", devices).inspected == 1


def test_a_file_that_is_no_longer_made_does_not_stay_but_a_users_own_does(tmp_path):
    devices = fake_devices(tmp_path / "in", "more")
    run(tmp_path / "out", devices)
    assert (tmp_path / "out/S00000/master_flat.fits").exists()
    (tmp_path / "out/S00000/notes.txt").write_text("scratched on arrival")
    (tmp_path / "in/S00000/frame_1.raw").write_text("well")
    run(tmp_path / "out", devices)
    assert not (tmp_path / "out/S00000/master_flat.fits").exists()
    assert (tmp_path / "out/S00000/notes.txt").read_text() == "scratched on arrival"
    (tmp_path / "in/S00000/frame_1.raw").write_text("refuses")
    run(tmp_path / "out", devices)
    assert names_in(tmp_path / "out/S00000") == ["notes.txt"]


def test_a_link_in_place_of_a_devices_folder_is_not_followed(tmp_path):
    devices = fake_devices(tmp_path / "in", "well", "well")
    (tmp_path / "elsewhere").mkdir()
    (tmp_path / "out").mkdir()
    (tmp_path / "out" / "S00000").symlink_to(tmp_path / "elsewhere")
    outcome = run(tmp_path / "out", devices)
    assert (outcome.inspected, outcome.failed) == (1, 1)
    assert "is a link" in failures(tmp_path / "out")["S00000"]
    assert names_in(tmp_path / "elsewhere") == []


@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM])
@pytest.mark.parametrize("behaviours", [["slow 30"], ["well", "slow 30", "slow 30", "well"]])
def test_a_signal_stops_the_run_with_what_is_done_kept(tmp_path, number, behaviours):
    devices = fake_devices(tmp_path / "in", *behaviours)
    asked: list[Progress] = []

    def interrupt(progress: Progress) -> None:
        if not asked and (progress.stage == "read" or progress.inspected):
            asked.append(progress)
            threading.Timer(0.3, os.kill, (os.getpid(), number)).start()

    with run_folder(tmp_path / "out") as ledger:
        outcome = run_lot(
            devices,
            well,
            ledger=ledger,
            recipe=RECIPE,
            options=LotOptions(jobs=2),
            report=interrupt,
        )
    assert outcome.stopped is not None and "same command again" in outcome.stopped
    assert outcome.exit_status == 3
    assert outcome.inspected == (len(behaviours) > 1)
    names = names_in(tmp_path / "out")
    assert names == (["S00000"] if len(behaviours) > 1 else []) + ["lot.sqlite"]
    with read_ledger(tmp_path / "out") as ledger:
        assert ledger.runs()[-1].ending == "stopped"
    for device in devices:
        (tmp_path / f"in/{device.serial}/frame_1.raw").write_text("well")
    assert run(tmp_path / "out", devices).exit_status == 0


def test_a_full_disk_stops_the_run_and_blames_no_device(tmp_path):
    devices = fake_devices(tmp_path / "in", "well", "full", "well")
    outcome = run(tmp_path / "out", devices, jobs=1)
    assert outcome.failed == 0 and outcome.inspected == 1
    assert "no space is left" in (outcome.stopped or "")
    assert failures(tmp_path / "out") == {}


class Crash(BaseException):
    """The program ends here and now, as far as it can be acted in one process."""


@pytest.mark.parametrize(
    ("target", "method", "call"),
    [
        (Ledger, "open_folder", 1),
        (Path, "replace", 1),
        (Path, "replace", 2),
        (Path, "replace", 3),
        (Ledger, "record", 1),
        (Ledger, "end", 1),
    ],
)
@pytest.mark.parametrize("behaviours", [("more", "well"), ("well", "well")])
def test_an_end_in_the_middle_of_keeping_a_device_is_made_good_by_the_next_run(
    tmp_path, monkeypatch, target, method, call, behaviours
):
    devices = fake_devices(tmp_path / "in", "more", "well")
    run(tmp_path / "out", devices)  # something older is there already
    for device, behaviour in zip(devices, behaviours, strict=True):
        device.frames[1].path.write_text(f"{behaviour} than before")
    run(tmp_path / "expected", devices)
    done, calls = getattr(target, method), []

    def crash(*arguments, **named):
        calls.append(method)
        if len(calls) == call:
            raise Crash
        return done(*arguments, **named)

    with monkeypatch.context() as patch:
        patch.setattr(target, method, crash)
        with pytest.raises(Crash):
            run(tmp_path / "out", devices)
    run(tmp_path / "out", devices)
    assert tree(tmp_path / "out") == tree(tmp_path / "expected")
    with read_ledger(tmp_path / "out") as ledger:
        assert list(ledger.select("SELECT * FROM moving")) == []
        assert len(ledger.results()) == 2


def test_progress_counts_every_device(tmp_path):
    seen: list[Progress] = []
    devices = fake_devices(tmp_path / "in", "well", "refuses", "well")
    run(tmp_path / "out", devices[:1])
    run(tmp_path / "out", devices, seen=seen)
    assert (seen[0].total, seen[0].kept, seen[0].left, seen[0].rate) == (3, 1, 2, None)
    assert (seen[-1].inspected, seen[-1].failed, seen[-1].left) == (1, 1, 0)
    assert {progress.device for progress in seen[1:]} == {"S00001", "S00002"}


def test_the_stages_of_a_single_device_are_told_while_they_run(tmp_path):
    seen: list[Progress] = []
    run(tmp_path / "out", fake_devices(tmp_path / "in", "well"), seen=seen)
    assert [progress.stage for progress in seen] == [None, "read", "write", None]


def test_inputs_that_vanish_are_told_and_the_others_go_on(tmp_path):
    devices = fake_devices(tmp_path / "in", "well", "well")
    devices[0].frames[1].path.unlink()
    outcome = run(tmp_path / "out", devices)
    assert (outcome.inspected, outcome.failed) == (1, 1)
    assert "frame_1.raw: No such file" in failures(tmp_path / "out")["S00000"]
    fake_device(tmp_path / "in", 0)
    assert run(tmp_path / "out", devices).exit_status == 0


def test_a_file_name_that_is_no_text_stops_nothing(tmp_path):
    devices = fake_devices(tmp_path / "in", "well", "well")
    path = tmp_path / "in" / "frame\udcff.raw"
    stack = devices[0].stacks[0]
    frames = (stack.frames[0], replace(stack.frames[1], path=path), stack.frames[2])
    devices[0] = replace(devices[0], stacks=(replace(stack, frames=frames),))
    outcome = run(tmp_path / "out", devices)
    assert (outcome.inspected, outcome.failed) == (1, 1)
    assert "frame\\udcff.raw: No such file" in failures(tmp_path / "out")["S00000"]
