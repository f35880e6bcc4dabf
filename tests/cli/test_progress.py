import json

from sensorgrade.cli import progress as shown
from sensorgrade.lot.progress import Progress, progress_line


def test_a_program_gets_a_line_at_the_start_and_at_the_end(capsys):
    with shown.shown_progress(quiet=False) as report:
        for done in range(5):
            report(Progress(4, 0, done, 0, 0.1 * done, f"S{done}"))
    output = capsys.readouterr()
    lines = [json.loads(line) for line in output.err.splitlines()]
    assert output.out == ""
    assert [line["left"] for line in lines] == [4, 0]
    assert lines[-1]["device"] == "S4"
    assert lines[-1]["devices_per_second"] == 10.0


def test_quiet_prints_nothing(capsys):
    with shown.shown_progress(quiet=True) as report:
        report(Progress(4, 0, 4, 0, 1.0))
    assert capsys.readouterr() == ("", "")


def test_a_terminal_gets_a_bar(monkeypatch, capsys):
    monkeypatch.setattr("sys.stderr.isatty", lambda: True)
    with shown.shown_progress(quiet=False) as report:
        report(Progress(4, 1, 2, 1, 1.0))
    assert "{" not in capsys.readouterr().err


def test_the_text_says_what_is_done_failed_left_and_when_it_ends():
    text = shown.progress_text(Progress(24, 2, 11, 1, 5.0, "S1", "dark masters"))
    assert text.startswith("14 of 24 devices, 2 of them from before, 1 not inspected, 2.4 /s, end")
    assert text.endswith("dark masters")
    assert shown.progress_text(Progress(3, 0, 0, 0, 0.0)) == "0 of 3 devices"


def test_rate_and_time_left_follow_from_this_runs_devices_alone():
    progress = Progress(total=30, kept=10, inspected=8, failed=2, seconds=20.0)
    assert (progress.left, progress.rate, progress.seconds_left) == (10, 0.5, 20.0)
    assert json.loads(progress_line(progress))["seconds_left"] == 20
    assert Progress(3, 3, 0, 0, 1.0).rate is None
