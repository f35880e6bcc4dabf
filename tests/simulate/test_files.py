"""Simulated devices on disk: what was simulated is what is read back, truth included."""

import json
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
import yaml
from astropy.io import fits
from click.testing import CliRunner
from numpy.testing import assert_array_equal

from sensorgrade import api
from sensorgrade.cli.main import command, main
from sensorgrade.errors import RequestError
from sensorgrade.frames.inventory import find_devices
from sensorgrade.recipe.library import recipe_folder, recipe_names
from sensorgrade.recipe.load import load_options, load_recipe
from sensorgrade.recipe.model import Sensor
from sensorgrade.recipe.vocabulary import Vocabulary
from sensorgrade.simulate.device import simulate_device
from sensorgrade.simulate.files import write_device
from sensorgrade.simulate.lot import Simulation, find_model, model_names, write_lot
from sensorgrade.simulate.model import DefectModel, SensorModel
from sensorgrade.simulate.plan import FramePlan, StackPlan, frame_plan
from simulate.sensors import two_outputs

RECIPE = """
name: written frames
sensor: {technology: ccd, pixel_pitch: 15 um}
frames:
  temperature: CCD-TEMP
  level: LEVEL
  wavelength: FILTER
  serial: SERIAL
  lot: LOT
  wafer: WAFER
  die_row: DIEROW
  die_column: DIECOL
"""
SMALL = """
device:
  sensor: {technology: cmos, pixel_pitch: 5 um}
  rows: 16
  columns: 24
  defects: [{kind: hot, count: 2, current: 50 electron/s}]
plan:
  stacks:
    - {kind: bias, frames: 2}
    - {kind: dark, frames: 1, exposure: 10 s}
"""
NOTHING = Vocabulary(stages={}, quantities={}, meanings={}, counts=(), sources={})


@pytest.fixture
def recipe(tmp_path):
    path = tmp_path / "recipe.yaml"
    path.write_text(RECIPE)
    return load_recipe(path, NOTHING)


def test_frames_come_back_as_they_were_simulated(tmp_path, recipe):
    plan = FramePlan(
        stacks=(
            StackPlan(kind="bias", frames=2),
            StackPlan(kind="dark", frames=1, exposure=12.5),
            StackPlan(kind="flat", frames=2, exposure=3.0, light=60e3, wavelength="550"),
            StackPlan(kind="flat", frames=2, exposure=3.0, light=140e3, wavelength="550"),
        ),
        temperature=-12.5,
    )
    made = simulate_device(two_outputs(full_well=2e5), plan, serial="A/1")
    frames = replace(made.frames, lot="L", wafer="03", die_row=4, die_column=5)
    write_device(replace(made, frames=frames), tmp_path / "frames" / frames.folder)
    (found,) = find_devices([tmp_path / "frames"], recipe)
    assert (found.serial, found.lot, found.wafer) == ("A/1", "L", "03")
    assert (found.die_row, found.die_column) == (4, 5)
    assert found.findings == ()
    assert len(found.stacks) == len(frames.stacks)
    for read, was in zip(found.frames, frames.frames, strict=True):
        assert read.kind == was.kind
        assert read.exposure == was.exposure
        assert read.temperature == was.temperature
        assert read.level == was.level
        assert read.wavelength == was.wavelength
        assert read.time == pytest.approx(was.time, abs=1e-3)
        assert_array_equal(fits.getdata(read.path), was.planes[""].data)
        assert fits.getheader(read.path)["BITPIX"] == 16


def test_codes_above_half_of_16_bits_are_kept(tmp_path):
    plan = FramePlan(stacks=(StackPlan(kind="flat", frames=1, light=2e6),))
    made = simulate_device(two_outputs(full_well=1e7), plan)
    write_device(made, tmp_path)
    data = fits.getdata(tmp_path / "0000_flat.fits")
    assert data.max() == 65535
    assert data.dtype == "uint16"


def test_a_level_is_stated_only_where_the_exposure_does_not_tell_the_light():
    steady = frame_plan(bias=1, darks=(), levels=(1e3, 2e3))
    pulsed = FramePlan(stacks=tuple(StackPlan(kind="flat", light=x) for x in (1e3, 2e3)))
    varied = FramePlan(
        stacks=tuple(StackPlan(kind="flat", light=x, exposure=t) for x, t in ((1e3, 1), (4e3, 2)))
    )
    levels = [
        [stack.level for stack in simulate_device(two_outputs(), plan).frames.stacks]
        for plan in (steady, pulsed, varied)
    ]
    assert levels == [[None, None, None], [1e3, 2e3], [1e3, 2e3]]


def test_the_truth_is_written_with_places_as_fits_counts_them(tmp_path):
    model = two_outputs(
        defects=(DefectModel(kind="dead", row=2, column=50, height=3, width=2, response=10.0),)
    )
    made = simulate_device(model, frame_plan(bias=1, darks=()))
    write_device(made, tmp_path)
    truth = json.loads((tmp_path / "truth.json").read_text())
    assert truth["defects"] == [
        {
            "name": "dead cluster",
            "output": "right",
            "section": "[51:52,3:5]",
            "value": 10.0,
            "unit": "%",
        }
    ]
    assert truth["regions"]["output left"]["read_noise"] == 5.0


def test_the_command_writes_a_lot_whose_devices_differ(tmp_path):
    model = tmp_path / "model.yaml"
    model.write_text(SMALL)
    out = tmp_path / "out"
    result = CliRunner().invoke(
        command, ["simulate", str(model), "--out", str(out), "--devices", "2", "--json"]
    )
    assert result.exit_code == 0, result.output
    told = json.loads(result.output)
    assert told == {"devices": [str(out / "SIM-0001"), str(out / "SIM-0002")], "frames": 3}
    first, second = (
        fits.getdata(out / name / "0000_bias.fits") for name in ("SIM-0001", "SIM-0002")
    )
    assert (first != second).any()
    assert len(json.loads((out / "SIM-0001" / "truth.json").read_text())["defects"]) == 2


def test_the_same_seed_writes_the_same_bytes(tmp_path):
    path = tmp_path / "model.yaml"
    path.write_text(SMALL)
    simulation = load_options(path, Simulation)
    write_lot(simulation, tmp_path / "one", devices=1, seed=5)
    write_lot(simulation, tmp_path / "two", devices=2, seed=5, threads=1)
    write_lot(simulation, tmp_path / "three", devices=1, seed=6)
    bytes_of = [
        {file.name: file.read_bytes() for file in (tmp_path / name / "SIM-0001").iterdir()}
        for name in ("one", "two", "three")
    ]
    assert bytes_of[0] == bytes_of[1]
    assert bytes_of[0] != bytes_of[2]


@pytest.mark.parametrize("name", model_names())
def test_a_ready_model_is_right_and_fits_its_recipe(name):
    simulation = load_options(find_model(name), Simulation)
    recipe = yaml.safe_load((recipe_folder() / f"{name.removesuffix('-after')}.yaml").read_text())
    model = yaml.safe_load(find_model(name).read_text())
    assert model["device"]["sensor"] == recipe["sensor"]
    small = replace(simulation.plan, stacks=(StackPlan(kind="bias", frames=1),))
    made = simulate_device(simulation.device, small)
    assert made.frames.frames[0].planes[""].shape == (
        simulation.device.rows,
        simulation.device.columns,
    )


@pytest.mark.parametrize("name", model_names())
def test_frames_of_a_ready_model_are_read_as_its_recipe_says(name, tmp_path):
    recipe = api.load_recipe(name.removesuffix("-after"))
    simulation = load_options(find_model(name), Simulation)
    kinds = {stack.kind for stack in simulation.plan.stacks}
    one_of_each = tuple(StackPlan(kind=kind, frames=1, exposure=2.0) for kind in sorted(kinds))
    small = replace(simulation, plan=replace(simulation.plan, stacks=one_of_each))
    write_lot(small, tmp_path, devices=2)
    found = find_devices([tmp_path], recipe)
    assert [device.serial for device in found] == ["SIM-0001", "SIM-0002"]
    for device in found:
        assert {stack.kind for stack in device.stacks} == kinds
        assert device.findings == ()
        assert (device.lot is None) == (simulation.wafer is None)


def test_every_ready_recipe_can_be_shown_but_the_one_for_real_frames():
    ready = {name.removesuffix("-after") for name in model_names()}
    assert set(recipe_names()) - ready == {"demo", "twilight-flats"}


def test_some_devices_only_have_a_defect_by_chance():
    pattern = DefectModel(kind="dead", count=3, chance=30.0)
    model = SensorModel(
        sensor=Sensor(technology="cmos", pixel_pitch=5.0), rows=24, columns=24, defects=(pattern,)
    )
    bias = frame_plan(bias=1, darks=())
    counts = [
        len(simulate_device(model, bias, serial=f"S{number}").truth.defects)
        for number in range(200)
    ]
    assert set(counts) == {0, 3}
    # Binomial: 60 of 200, standard deviation 6.5.
    assert 40 <= np.count_nonzero(counts) <= 80


def test_a_wrong_model_is_refused_with_all_its_mistakes(tmp_path, capsys):
    path = tmp_path / "model.yaml"
    path.write_text(SMALL.replace("rows: 16", "rows: many").replace("kind: dark", "kind: gray"))
    with pytest.raises(SystemExit) as ended:
        main(["simulate", str(path), "--out", str(tmp_path / "out")])
    told = capsys.readouterr().err
    assert ended.value.code == 2
    assert 'device.rows: expected a whole number, 1 or more, found "many"' in told
    assert "expected bias, dark, flat" in told
    assert not (tmp_path / "out").exists()


def test_a_folder_in_use_is_left_alone(tmp_path, capsys):
    (tmp_path / "mine.txt").write_text("kept")
    with pytest.raises(SystemExit) as ended:
        main(["simulate", "cmos-12-bit", "--out", str(tmp_path)])
    assert ended.value.code == 2
    assert "exists and is not empty; name a new folder" in capsys.readouterr().err
    assert [path.name for path in Path(tmp_path).iterdir()] == ["mine.txt"]


def test_an_unknown_model_gets_the_nearest():
    with pytest.raises(RequestError, match="nearest is two-output-ccd"):
        find_model("two-outputs-ccd")


def test_a_ready_model_is_shown_as_it_stands():
    shown = CliRunner().invoke(command, ["simulate", "two-output-ccd", "--show"]).output
    assert shown == find_model("two-output-ccd").read_text(encoding="utf-8")
