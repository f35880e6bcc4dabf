import os
import pickle

import numpy as np
import pytest

from frames.recipes import recipe_with
from frames.written import write_fits
from sensorgrade.errors import RequestError
from sensorgrade.frames.decode import decoded, read_plane
from sensorgrade.frames.inventory import find_devices
from sensorgrade.recipe.model import OutputOptions, RawBinary

IMAGE = np.full((4, 6), 1000, np.uint16)


def put(path, kind="bias", image=IMAGE, **cards):
    path.parent.mkdir(parents=True, exist_ok=True)
    return write_fits(path, image, IMAGETYP=kind, EXPTIME=cards.pop("EXPTIME", 0.0), **cards)


def devices(*sources, recipe=None):
    return {d.serial: d for d in find_devices(sources, recipe or recipe_with())}


def seen(device):
    return {finding.where: finding.seen for finding in device.findings}


def test_one_folder_is_one_device(tmp_path):
    for n in (2, 10, 1):
        put(tmp_path / "SN7" / f"b{n}.fits")
    put(tmp_path / "SN7" / "d.fits", "Dark Frame", EXPTIME=20.0)
    device = devices(tmp_path / "SN7")["SN7"]
    assert [s.name for s in device.stacks] == ["bias", "dark, 20 s"]
    assert [f.label for f in device.stacks[0].frames] == ["b1.fits", "b2.fits", "b10.fits"]
    assert device.findings == ()
    assert pickle.loads(pickle.dumps(device)) == device


def test_folders_named_for_kinds_belong_to_the_device_above(tmp_path):
    put(tmp_path / "A" / "BIAS" / "1.fits")
    put(tmp_path / "A" / "flat_20s" / "Blue" / "1.fits", "flat")
    put(tmp_path / "B" / "1.fits")
    put(tmp_path / "B" / "Dark Frames" / "1.fits", "dark", EXPTIME=1.0)
    found = devices(tmp_path)
    assert {serial: len(device.frames) for serial, device in found.items()} == {"A": 2, "B": 2}
    assert found["A"].frames[1].label == "A/flat_20s/Blue/1.fits"


def test_folders_of_one_name_are_told_apart(tmp_path):
    for wafer in ("W1", "W2"):
        put(tmp_path / wafer / "D5" / "1.fits")
    assert list(devices(tmp_path)) == ["W1/D5", "W2/D5"]
    assert list(devices(tmp_path / "W1", tmp_path / "W2")) == ["W1/D5", "W2/D5"]


def test_a_flat_folder_is_told_apart_by_serial(tmp_path):
    for n, serial in enumerate(("S1", "S2", "S1")):
        put(tmp_path / f"{n}.fits", SERIAL=serial)
    found = devices(tmp_path, recipe=recipe_with(serial="SERIAL"))
    assert {serial: len(device.frames) for serial, device in found.items()} == {"S1": 2, "S2": 1}


def test_one_serial_in_two_sources_is_one_device(tmp_path):
    put(tmp_path / "mon" / "1.fits", SERIAL="S1")
    put(tmp_path / "tue" / "1.fits", SERIAL="S1")
    (device,) = devices(
        tmp_path / "mon", tmp_path / "tue", recipe=recipe_with(serial="SERIAL")
    ).values()
    assert [f.label for f in device.frames] == ["mon/1.fits", "tue/1.fits"]


def test_identity_and_conditions_come_from_the_header(tmp_path):
    put(
        tmp_path / "f.fits",
        "pump",
        EXPTIME="500 ms",
        LOTID="L9",
        WAFER=4,
        DIEX=-2,
        CYC=1000,
        TPH="25 us",
        CCD_TEMP="250.15 K",
        FILTER="550 nm",
        LAMP=2.5,
        DATE_OBS="1970-01-01T00:00:05",
    )
    rules = {"lot": "LOTID", "wafer": "WAFER", "die_column": "DIEX", "cycles": "CYC"}
    rules |= {"phase_time": "TPH", "temperature": "CCD-TEMP", "wavelength": "FILTER"}
    (device,) = devices(tmp_path, recipe=recipe_with(level="LAMP", **rules)).values()
    frame = device.frames[0]
    assert (device.lot, device.wafer, device.die_row, device.die_column) == ("L9", "4", None, -2)
    assert (frame.exposure, frame.temperature, frame.level) == (0.5, pytest.approx(-23.0), 2.5)
    assert (frame.wavelength, frame.cycles, frame.phase_time, frame.time) == ("550", 1000, 25.0, 5)


def test_conditions_come_from_a_manifest(tmp_path):
    np.save(tmp_path / "one.npy", IMAGE)
    (tmp_path / "sub").mkdir()
    np.save(tmp_path / "sub" / "two.npy", IMAGE)
    np.save(tmp_path / "three.npy", IMAGE)
    (tmp_path / "list.csv").write_text(
        "File,kind,exposure,serial\n"
        "one.npy,Dark,20 s,S1\n"
        "sub\\two.npy,flat,1,S1\n"
        "gone.npy,flat,1,S1\n"
    )
    rules = {"sorted_by": "manifest", "manifest": "list.csv"}
    device = devices(tmp_path, recipe=recipe_with(**rules))["S1"]
    assert [(f.kind, f.exposure) for f in device.frames] == [("dark", 20.0), ("flat", 1.0)]
    assert seen(device)["three.npy"].startswith("has no row in the manifest")
    assert seen(device)["gone.npy"] == "is named in the manifest and is not there"


def test_each_device_folder_may_have_a_manifest_of_its_own(tmp_path):
    for name in ("A", "B"):
        (tmp_path / name).mkdir()
        np.save(tmp_path / name / "x.npy", IMAGE)
        (tmp_path / name / "list.csv").write_text("file,kind\nx.npy,bias\n")
    rules = {"sorted_by": "manifest", "manifest": "list.csv"}
    assert list(devices(tmp_path, recipe=recipe_with(**rules))) == ["A", "B"]


def test_conditions_come_from_the_name_and_the_rest_from_the_header(tmp_path):
    put(tmp_path / "S3_flat_550nm.fits", "object", EXPTIME=2.0)
    put(tmp_path / "stray.fits", "bias")
    rules = {
        "sorted_by": "name",
        "pattern": r"(?P<serial>S\d+)_(?P<kind>[a-z]+)_(?P<wavelength>.*)\.",
    }
    device = devices(tmp_path, recipe=recipe_with(**rules))["S3"]
    (frame,) = device.frames
    assert (frame.kind, frame.wavelength, frame.exposure) == ("flat", "550", 2.0)
    assert "does not match frames.pattern" in seen(device)["stray.fits"]


def test_raw_files_follow_the_recipes_layout(tmp_path):
    (tmp_path / "bias_1.raw").write_bytes(IMAGE.astype("<u2").tobytes())
    rules = {"sorted_by": "name", "pattern": "(?P<kind>[a-z]+)_"}
    raw = RawBinary(dtype="uint16", rows=4, columns=6)
    (device,) = devices(tmp_path, recipe=recipe_with(raw=raw, **rules)).values()
    assert device.frames[0].planes[""].shape == (4, 6)


def test_outputs_in_extensions_become_planes(tmp_path):
    from astropy.io import fits

    primary = fits.PrimaryHDU()
    primary.header["IMAGETYP"] = "bias"
    units = [primary, fits.ImageHDU(IMAGE, name="A"), fits.ImageHDU(IMAGE, name="B")]
    fits.HDUList(units).writeto(tmp_path / "x.fits")
    outputs = {"left": OutputOptions(extension="A"), "right": OutputOptions(extension="B")}
    (device,) = devices(tmp_path, recipe=recipe_with(outputs)).values()
    assert list(device.frames[0].planes) == ["A", "B"]


def test_unknown_kinds_and_damaged_files_are_left_out_and_named(tmp_path):
    for n in range(2):
        put(tmp_path / f"b{n}.fits")
    put(tmp_path / "light.fits", "light")
    put(tmp_path / "focus.fits", "focus")
    write_fits(tmp_path / "none.fits", IMAGE)
    (tmp_path / "cut.fits").write_bytes((tmp_path / "b0.fits").read_bytes()[:2890])
    (tmp_path / "notes.txt").write_text("note")
    (tmp_path / ".hidden.fits").write_text("note")
    (tmp_path / "what.xyz").write_text("note")
    (device,) = devices(tmp_path, recipe=recipe_with(kinds={"focus": "ignore"})).values()
    assert len(device.frames) == 2
    found = seen(device)
    assert set(found) == {"light.fits", "none.fits", "cut.fits", "what.xyz"}
    assert found["light.fits"].startswith("is of the kind 'light', which is not known")
    assert found["none.fits"].startswith("does not say its kind (IMAGETYP is missing")
    assert found["cut.fits"].startswith("truncated: the image ends at byte 2928")


def test_a_missing_exposure_of_a_dark_undecides_the_dark_current(tmp_path):
    path = put(tmp_path / "d.fits", "dark")
    path.write_bytes(path.read_bytes().replace(b"EXPTIME", b"OTHER  "))
    (device,) = devices(tmp_path).values()
    (finding,) = device.findings
    assert finding.seen == "does not say its exposure (EXPTIME is missing)"
    assert "dark_current" in finding.undecides


@pytest.mark.parametrize(
    ("cards", "sentence"),
    [
        ({"EXPTIME": -1.0}, "its exposure is -1 s, which cannot be"),
        ({"EXPTIME": "long"}, "its exposure (EXPTIME) is 'long', which could not be understood"),
        ({"DATE_OBS": "noon"}, "its time (DATE-OBS) is 'noon', which could not be understood"),
    ],
)
def test_values_that_cannot_be_understood_are_named(tmp_path, cards, sentence):
    put(tmp_path / "d.fits", "flat", **cards)
    (device,) = devices(tmp_path).values()
    assert sentence in seen(device)["d.fits"]


def test_many_findings_alike_become_one(tmp_path):
    put(tmp_path / "b.fits")
    for n in range(9):
        put(tmp_path / f"x{n}.fits", "light")
    (device,) = devices(tmp_path).values()
    (finding,) = device.findings
    assert finding.where == "x0.fits and 8 more"


def test_a_device_without_any_usable_frame_is_not_lost(tmp_path):
    put(tmp_path / "A" / "b.fits")
    (tmp_path / "B").mkdir()
    (tmp_path / "B" / "b.fits").write_text("empty")
    found = devices(tmp_path)
    assert found["B"].stacks == ()
    assert found["B"].findings[0].severity == "error"


def test_pipes_links_and_loops_are_told_and_never_opened(tmp_path):
    put(tmp_path / "b.fits")
    os.mkfifo(tmp_path / "pipe.fits")
    (tmp_path / "loop").symlink_to(tmp_path)
    (tmp_path / "gone.fits").symlink_to(tmp_path / "nowhere")
    (tmp_path / "self.fits").symlink_to(tmp_path / "self.fits")
    (tmp_path / "zero.fits").symlink_to("/dev/zero")
    (device,) = devices(tmp_path).values()
    found = seen(device)
    assert len(device.frames) == 1
    assert found["pipe.fits"].startswith("is a pipe, socket or device")
    assert found["zero.fits"].startswith("is a pipe, socket or device")
    assert found["loop"].startswith("is a link to a folder that was looked at already")
    assert found["gone.fits"].startswith("cannot be read: no such file")
    assert found["self.fits"].startswith("cannot be read: ")


def test_results_of_a_run_are_not_taken_for_frames(tmp_path):
    put(tmp_path / "b.fits")
    put(tmp_path / "out" / "SN1" / "master_bias.fits")
    (tmp_path / "out" / "lot.sqlite").write_text("")
    (device,) = devices(tmp_path).values()
    assert len(device.frames) == 1
    assert seen(device)["out"].startswith("holds the results of a run")


def test_names_are_made_fit_to_print(tmp_path):
    put(tmp_path / "a\x1b[31m.fits", SERIAL="S")
    (device,) = devices(tmp_path).values()
    assert device.frames[0].label.isprintable()
    (tmp_path / "a\x1b[31m.fits").rename(tmp_path / os.fsdecode(b"\xff.fits"))
    (device,) = devices(tmp_path).values()
    device.frames[0].label.encode("utf-8")
    assert read_plane(device.frames[0].planes[""], 0, 4)[0, 0] == 1000


def test_mixed_serials_are_told(tmp_path):
    for n in range(3):
        put(tmp_path / "A" / f"{n}.fits", SERIAL="A1")
        put(tmp_path / "B" / f"{n}.fits", SERIAL="B1")
    put(tmp_path / "B" / "9.fits", SERIAL="A1")
    asked = devices(tmp_path, recipe=recipe_with(serial="SERIAL"))
    assert seen(asked["A1"]) == {
        "B/9.fits": "mixed serials: 1 frame(s) of A1 lie among frames of B1"
    }
    assert asked["B1"].findings == ()
    by_folder = devices(tmp_path)
    assert by_folder["A"].findings == ()
    assert len(by_folder["B"].findings) == 2


def test_different_wafers_in_one_device_are_told(tmp_path):
    put(tmp_path / "1.fits", WAFER="W1")
    put(tmp_path / "2.fits", WAFER="W2")
    (device,) = devices(tmp_path, recipe=recipe_with(wafer="WAFER")).values()
    assert device.wafer == "W1"
    assert "different values of wafer: W1, W2" in device.findings[0].seen


@pytest.mark.parametrize("name", ["gone", "file", "empty", "text"])
def test_a_source_without_frames_is_refused(tmp_path, name):
    (tmp_path / "file").write_text("")
    (tmp_path / "empty").mkdir()
    (tmp_path / "text").mkdir()
    (tmp_path / "text" / "x.fits").write_text("no frame")
    sentence = {
        "gone": "no such source",
        "file": "is no folder",
        "empty": "holds no frames; they are files named .fits",
        "text": "none of its 1 files can be used; the first is x.fits: truncated",
    }[name]
    with pytest.raises(RequestError, match=sentence):
        find_devices([tmp_path / name], recipe_with())


def test_overlapping_sources_are_refused(tmp_path):
    put(tmp_path / "A" / "b.fits")
    for second in (tmp_path, tmp_path / "A", tmp_path / "A" / ".." / "A"):
        with pytest.raises(RequestError, match="overlaps the source"):
            find_devices([tmp_path / "A", second], recipe_with())


@pytest.mark.parametrize(
    ("text", "sentence"),
    [
        ("kind\nbias\n", "list.csv:1: has no column file, path, filename, name; it has kind"),
        ("file,kind\nx.npy,bias,3\n", "list.csv:2: has 3 cells, the first line has 2"),
        ("file,kind\nx.npy,bias\nx.npy,bias\n", "list.csv:3: names 'x.npy' a second time"),
        ('file,kind\n"x.npy,bias\n', "is not a CSV file in UTF-8"),
        (b"file\n\xff\xfe\n", "is not a CSV file in UTF-8"),
        (None, "has no manifest 'list.csv'"),
    ],
)
def test_a_wrong_manifest_is_refused_by_line(tmp_path, text, sentence):
    np.save(tmp_path / "x.npy", IMAGE)
    if text is not None:
        (tmp_path / "list.csv").write_bytes(text if isinstance(text, bytes) else text.encode())
    rules = {"sorted_by": "manifest", "manifest": "list.csv"}
    with pytest.raises(RequestError, match=sentence):
        find_devices([tmp_path], recipe_with(**rules))


def test_coded_planes_are_decoded_device_by_device(tmp_path):
    source, scratch = tmp_path / "in", tmp_path / "scratch"
    scratch.mkdir()
    for n in range(2):
        put(source / f"{n}.fits", image=IMAGE.astype(np.int32) + n)
    bad = put(source / "2.fits", image=np.zeros((4, 6), np.int32))
    (device,) = devices(source).values()
    bad.write_bytes(bad.read_bytes()[:2900])
    ready = decoded(device, scratch=scratch)
    assert [f.label for f in ready.frames] == ["0.fits", "1.fits"]
    for n, frame in enumerate(ready.frames):
        plane = frame.planes[""]
        assert (plane.coding, plane.dtype, plane.path.parent) == (None, "float32", scratch)
        np.testing.assert_array_equal(read_plane(plane, 1, 3), IMAGE[1:3] + np.float32(n))
    (finding,) = ready.findings
    assert finding.where == "2.fits"
    assert finding.seen.startswith("truncated: its samples end at row 0 of 4")


def test_a_device_of_plain_planes_needs_no_scratch(tmp_path):
    put(tmp_path / "b.fits")
    (device,) = devices(tmp_path).values()
    assert decoded(device, scratch=tmp_path / "never made") is device
