import os

import pytest

from sensorgrade.errors import RequestError
from sensorgrade.lot.lock import held_by, run_lock


def test_a_folder_is_held_by_one_run_and_free_afterwards(tmp_path):
    with run_lock(tmp_path / "out"):
        assert f"process {os.getpid()} on" in (held_by(tmp_path / "out") or "")
        with (
            pytest.raises(RequestError, match=f"in use by another run .process {os.getpid()} on"),
            run_lock(tmp_path / "out"),
        ):
            raise AssertionError
    assert held_by(tmp_path / "out") is None
    assert list((tmp_path / "out").iterdir()) == []
    with run_lock(tmp_path / "out"):
        pass


def test_the_lock_file_of_a_run_that_was_killed_holds_nobody_up(tmp_path):
    (tmp_path / "lot.lock").write_text("process 1 on an older host, with a longer text")
    assert held_by(tmp_path) is None
    with run_lock(tmp_path):
        assert (tmp_path / "lot.lock").read_text().startswith(f"process {os.getpid()} on")
        assert "older host" not in (tmp_path / "lot.lock").read_text()


def test_a_lock_file_that_was_taken_away_meanwhile_is_made_again(tmp_path):
    with run_lock(tmp_path):
        (tmp_path / "lot.lock").unlink()
    with run_lock(tmp_path):
        assert held_by(tmp_path) is not None
