"""Figures as files: every figure of the page, readable by others, the same for the same device."""

from dataclasses import replace
from xml.etree import ElementTree

import numpy as np
import pytest
from matplotlib import image

from sensorgrade.frames.inventory import find_devices
from sensorgrade.inspection import inspect_device, inspect_lot
from sensorgrade.lot.engine import LotOptions, run_folder
from sensorgrade.recipe.library import find_recipe
from sensorgrade.recipe.load import load_recipe
from sensorgrade.report.figure_files import drawn_master, drawn_plot, write_figures
from sensorgrade.report.figures import plots
from sensorgrade.simulate.demo import demo_lot, write_demo
from sensorgrade.stages import vocabulary

SVG = "{http://www.w3.org/2000/svg}"


@pytest.fixture(scope="module")
def asked():
    return load_recipe(find_recipe("demo"), vocabulary())


@pytest.fixture(scope="module")
def frames(tmp_path_factory):
    folder = tmp_path_factory.mktemp("frames")
    write_demo(demo_lot()[:1], folder, seed=0)
    return folder


@pytest.fixture(scope="module")
def made(frames, asked):
    (found,) = find_devices([frames], asked)
    return inspect_device(found, asked, threads=2)


def test_a_run_leaves_each_figure_of_the_page_as_png_and_svg(frames, asked, made, tmp_path):
    devices = find_devices([frames], asked)
    with run_folder(tmp_path / "out") as ledger:
        for fresh in (False, True):  # a second run replaces the first one's files
            outcome = inspect_lot(
                devices, asked, ledger=ledger, options=LotOptions(fresh=fresh), figures=True
            )
            assert outcome.inspected == 1
        folder = tmp_path / "out" / devices[0].folder
        found = sorted(path.name for path in (folder / "figures").iterdir())
        names = {one.key for one in plots(made.stages)}
        names |= {"master-bias", "master-dark", "master-flat"}
        assert found == sorted(f"{name}.{form}" for name in names for form in ("png", "svg"))
        page = (folder / "device.html").read_text()
        assert all(f'<figure class="sheet" id="{one.key}">' in page for one in plots(made.stages))
        # ... and a later run that was not asked for figures leaves no old ones behind
        inspect_lot(devices, asked, ledger=ledger, options=LotOptions(fresh=True))
        assert not (folder / "figures").exists()


def test_figure_files_show_what_they_are_called_after(made, tmp_path):
    few = {name: made.stages[name] for name in ("photon_transfer", "dark_current")}
    masters = replace(made.masters, bias=None, dark=None)
    for name in ("one", "two"):
        write_figures(tmp_path / name, masters=masters, stages=few, serial=made.result.serial)
    for one in plots(few):
        svg = (tmp_path / "one" / f"{one.key}.svg").read_bytes()
        texts = [
            "".join(node.itertext()) for node in ElementTree.fromstring(svg).iter(f"{SVG}text")
        ]
        assert f"{made.result.serial}: {one.title}" in texts
        assert one.x.label in texts
        assert one.y.label in texts
        assert not any("$" in text for text in texts)
        assert svg == (tmp_path / "two" / f"{one.key}.svg").read_bytes()
        png = image.imread(tmp_path / "one" / f"{one.key}.png")
        assert min(png.shape[:2]) > 600
        assert np.ptp(png[..., :3]) > 0.5


def test_a_plot_as_file_draws_the_numbers_of_the_page(made):
    (one,) = (plot for plot in plots(made.stages) if plot.key == "photon-transfer")
    upper, lower = drawn_plot(one).axes
    points = [line.get_xydata() for line in upper.lines if line.get_linestyle() == "None"]
    for series, found in zip((s for s in one.series if s.draw == "points"), points, strict=True):
        np.testing.assert_array_equal(found, np.column_stack((series.x, series.y)))
    assert lower.get_xscale() == upper.get_yscale() == "log"


def test_a_picture_as_file_shows_the_master_row_one_below(made):
    master = made.masters.dark
    axes, bar = drawn_master(master).axes
    np.testing.assert_array_equal(axes.images[0].get_array(), master.values)
    assert axes.get_ylim() == (0.5, master.values.shape[0] + 0.5)
    assert bar.get_ylabel() == "[DN]"


@pytest.mark.parametrize("text", [r"$\frac{$", "<script>alert(1)</script>", "]]>&\"'", "../../x"])
def test_hostile_serial_numbers_stay_text_in_figures(made, tmp_path, text):
    masters = replace(made.masters, bias=None, flat=None)
    write_figures(tmp_path / "figures", masters=masters, stages={}, serial=text)
    svg = ElementTree.parse(tmp_path / "figures" / "master-dark.svg")
    assert f"{text}: master dark" in ["".join(one.itertext()) for one in svg.iter(f"{SVG}text")]
    assert not any("script" in one.tag for one in svg.iter())
    assert sorted(path.name for path in tmp_path.rglob("*.*")) == [
        "master-dark.png",
        "master-dark.svg",
    ]
