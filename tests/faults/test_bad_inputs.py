"""Each bad input gets its sentence and exit status, on one line, without a traceback."""

import pytest

from faults.bad_inputs import FRAMES, RECIPES, healthy_bench
from faults.command_line import run
from sensorgrade.lot.ledger import read_ledger

pytest.importorskip("sensorgrade.stages")

FILES = {"result.json", "mask.fits", "defects.ecsv", "device.html"}


def test_the_table_is_as_long_as_promised():
    assert len(FRAMES) + len(RECIPES) >= 60
    names = [case.name for case in FRAMES + RECIPES]
    assert len(set(names)) == len(names)


def test_the_healthy_bench_has_no_fault(tmp_path):
    bench = healthy_bench(tmp_path)
    answer = run("check", str(bench.frames), "--recipe", str(bench.recipe))
    assert answer.out.endswith("1 device(s), 0 finding(s)\n")
    assert (answer.status, answer.err) == (0, "")


@pytest.mark.parametrize("case", FRAMES + RECIPES, ids=lambda case: case.name)
def test_a_bad_input_gets_its_sentence_and_status(tmp_path, case, capfd):
    bench = healthy_bench(tmp_path)
    case.spoil(bench)
    before = sorted(tmp_path.iterdir())
    answer = run("check", str(tmp_path / case.source), "--recipe", str(bench.recipe))
    printed = answer.out + answer.err
    assert case.sentence in printed
    assert answer.status == case.status, printed
    assert "Traceback" not in printed
    assert "a pickle was run" not in printed
    assert all(line.isprintable() for line in printed.splitlines())
    if case.status == 2:
        assert answer.out == ""
        assert answer.err.startswith("sensorgrade: ")
    assert sorted(tmp_path.iterdir()) == before
    assert capfd.readouterr() == ("", "")


@pytest.mark.parametrize("case", FRAMES + RECIPES, ids=lambda case: case.name)
def test_an_inspection_of_a_bad_input_says_the_same_and_leaves_nothing_half_done(
    tmp_path, case, capfd
):
    bench = healthy_bench(tmp_path)
    case.spoil(bench)
    out = tmp_path / "results" / "out"
    answer = run(
        "inspect", str(tmp_path / case.source), "--recipe", str(bench.recipe), "--out", str(out)
    )
    printed = answer.out + answer.err
    assert "Traceback" not in printed
    assert "a pickle was run" not in printed
    assert all(line.isprintable() for line in printed.splitlines())
    assert capfd.readouterr() == ("", "")
    if case.status == 2:
        assert case.sentence in answer.err
        assert (answer.status, answer.out) == (2, "")
        assert not out.parent.exists()
        return
    # What `check` tells of frames is a finding here, and the reason where nothing is left to use.
    with read_ledger(out) as ledger:
        told = [
            f"{one.where}: {one.seen}; {one.remedy}"
            for result in ledger.results()
            for one in result.findings
        ]
        failures = ledger.failures()
        told += [failure.reason for failure in failures]
        folders = {result.folder for result in ledger.results()}
    assert any(case.sentence in one for one in told), told
    assert answer.status == (3 if failures else 0)
    assert {path.name for path in out.iterdir()} == {
        "lot.sqlite", "lot.html", "lot.csv", *folders,
    }  # fmt: skip
    masters = {"master_bias.fits", "master_dark.fits", "master_flat.fits"}
    for folder in folders:
        assert {path.name for path in (out / folder).iterdir()} - masters == FILES
