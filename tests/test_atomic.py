import errno
import os

import pytest

from sensorgrade.atomic import UNFINISHED, write_whole


def test_text_and_bytes_are_written_and_take_the_place_of_what_was_there(tmp_path):
    path = tmp_path / "lot.csv"
    write_whole(path, "Ångström")
    assert path.read_bytes() == "Ångström".encode()
    write_whole(path, b"\0\1")
    assert path.read_bytes() == b"\0\1"
    assert list(tmp_path.iterdir()) == [path]


def test_others_may_read_it_as_any_file_one_makes(tmp_path):
    (tmp_path / "usual").touch()
    write_whole(tmp_path / "whole", "x")
    assert (tmp_path / "whole").stat().st_mode == (tmp_path / "usual").stat().st_mode


@pytest.mark.parametrize("step", ["fsync", "replace"])
def test_a_full_disk_leaves_the_old_file_and_nothing_else(tmp_path, monkeypatch, step):
    path = tmp_path / "lot.csv"
    write_whole(path, "before")

    def full(*arguments):
        raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))

    target = os if step == "fsync" else type(path)
    monkeypatch.setattr(target, step, full)
    with pytest.raises(OSError, match="No space"):
        write_whole(path, "after")
    assert path.read_text() == "before"
    assert [one.name for one in tmp_path.iterdir()] == ["lot.csv"]
    assert UNFINISHED.startswith(".")
