"""Each bad input gets its sentence and exit status, on one line, without a traceback."""

import pytest

from faults.bad_inputs import FRAMES, RECIPES, healthy_bench
from faults.command_line import run

pytest.importorskip("sensorgrade.stages")


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
