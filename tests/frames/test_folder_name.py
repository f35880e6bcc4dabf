import re
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from sensorgrade.frames.folder_name import folder_names

HOSTILE = [
    *("../../x", "/etc/passwd", "..", ".", "", " ", "a/b", "a\\b", "C:\\x", "~", "-rf"),
    *("\x1b[31mred", "a\0b", "a\nb", "con", "NUL.txt", "lot.sqlite", "lot", "ü", "x" * 300, "."),
    *("<script>", "=1+1", "$(id)", "`id`", "a b", "trailing.", "\udcff", "COM1", "\u202egnp"),
]


@pytest.mark.parametrize("serial", HOSTILE)
def test_no_serial_leaves_the_folder(serial, tmp_path):
    name = folder_names([serial])[serial]
    assert re.fullmatch(r"[A-Za-z0-9_][A-Za-z0-9._-]*", name)
    assert len(name) <= 77
    assert (tmp_path / name).resolve().parent == tmp_path.resolve()
    (tmp_path / name).mkdir()
    assert not re.fullmatch(r"(?i)(con|nul|com1|lot)(\..*)?", name)


@pytest.mark.parametrize("serial", ["SN-0017", "W03_D14", "a.1", "X"])
def test_a_plain_serial_keeps_its_name(serial):
    assert folder_names([serial]) == {serial: serial}


def test_serials_that_differ_only_in_case_get_folders_that_differ_in_more():
    names = folder_names(["sn1", "SN1", "SN2"])
    assert names["SN2"] == "SN2"
    assert names["sn1"].lower() != names["SN1"].lower()


def test_a_serial_that_imitates_another_ones_folder_gets_its_own():
    taken = folder_names(["a/b"])["a/b"]
    names = folder_names(["a/b", taken])
    assert len({name.lower() for name in names.values()}) == 2


@given(st.lists(st.text(max_size=400), max_size=20))
def test_every_serial_has_a_folder_of_its_own(serials):
    names = folder_names(serials)
    assert len({name.lower() for name in names.values()}) == len(set(serials))
    assert all(Path(name).name == name and len(name) <= 77 for name in names.values())
