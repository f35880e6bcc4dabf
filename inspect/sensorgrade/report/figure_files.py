"""The figures of a device's page as files: plots and master pictures, as PNG and as SVG."""

import math
from collections.abc import Mapping
from io import BytesIO
from pathlib import Path

import numpy as np
from matplotlib import rc_context
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure

from sensorgrade.atomic import write_whole
from sensorgrade.masters.master import Master, Masters
from sensorgrade.measure.stage import StageResult
from sensorgrade.report.figures import plots
from sensorgrade.report.picture import OVERVIEW, block_mean, coding
from sensorgrade.report.plot import Axis, Mark, Plot, Series
from sensorgrade.report.scale import scale
from sensorgrade.wording import unit_text

COLOURS = ("#1b5e8c", "#ad3a10", "#6f6a00", "#83389b", "#00715f", "#5b6165")  # those of the page
POINTS = "osD^x+"
INK = "#1a2126"
DPI = 200
MOST_TICKS = 7
WIDE = 6.0  # inch
STYLE = {
    "text.parse_math": False,  # names come from recipes and headers
    "svg.hashsalt": "sensorgrade",  # the same bytes for the same figure
    "svg.fonttype": "none",
    "font.size": 9.0,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.edgecolor": COLOURS[5],
    "lines.markersize": 3.5,
    "legend.frameon": False,
}


def write_figures(
    folder: Path, *, masters: Masters, stages: Mapping[str, StageResult], serial: str
) -> None:
    """Write ``<figure>.png`` and ``<figure>.svg`` of every figure into ``folder``.

    Raises
    ------
    OSError
        The folder cannot be written.
    """
    folder.mkdir(parents=True, exist_ok=True)
    with rc_context(STYLE):
        for plot in plots(stages):
            _write(drawn_plot(plot), folder / plot.key, f"{serial}: {plot.title}")
        for master in (masters.bias, masters.dark, masters.flat):
            if master is not None:
                name = f"master {master.kind}"
                _write(drawn_master(master), folder / name.replace(" ", "-"), f"{serial}: {name}")


def _write(figure: Figure, path: Path, title: str) -> None:
    figure.suptitle(title, x=0.02, ha="left", fontsize=10)
    for form, told in (("png", {"Title": title}), ("svg", {"Title": title, "Date": None})):
        bytes_ = BytesIO()
        figure.savefig(bytes_, format=form, dpi=DPI, metadata=told)
        write_whole(path.with_suffix(f".{form}"), bytes_.getvalue())


def drawn_plot(plot: Plot) -> Figure:
    """The plot with its second panel, if it has one, on the same x axis."""
    figure = Figure(figsize=(WIDE, 4.6 if plot.lower else 3.8), layout="constrained")
    FigureCanvasAgg(figure)
    ratios = (3, 1) if plot.lower else (1,)
    panels = figure.subplots(len(ratios), sharex=True, squeeze=False, height_ratios=ratios)[:, 0]
    _panel(panels[0], plot.y, plot.series, plot.marks)
    if plot.lower and plot.lower_y is not None:
        _panel(panels[1], plot.lower_y, plot.lower, ())
    _axis(panels[-1], "x", plot.x, plot.series + plot.lower)
    if sum(bool(one.label) for one in plot.series) > 1:
        figure.legend(loc="outside upper right", ncols=3, fontsize=8)
    return figure


def _panel(axes: Axes, axis: Axis, series: tuple[Series, ...], marks: tuple[Mark, ...]) -> None:
    axes.grid(axis="y", color="#d6d4cc", linewidth=0.6)
    axes.set_axisbelow(True)
    for one in series:
        colour = COLOURS[one.colour % len(COLOURS)]
        y = np.asarray(one.y, dtype=np.float64)
        if one.draw == "steps":
            axes.stairs(y, one.x, color=colour, label=one.label, baseline=None)
        elif one.draw == "points":
            point = POINTS[one.colour % len(POINTS)]
            axes.errorbar(
                one.x, y, one.y_error, color=colour, label=one.label, fmt=point, elinewidth=1
            )
        else:
            style = "--" if one.draw == "dashes" else "-"
            axes.plot(one.x, y, style, color=colour, label=one.label, linewidth=1.1)
    for line, x in enumerate(dict.fromkeys(mark.x for mark in marks if mark.x is not None)):
        axes.axvline(x, color=INK, linestyle=":", linewidth=1)
        text = ", ".join(mark.label for mark in marks if mark.x == x)
        axes.text(
            x,
            0.02 + 0.06 * (line % 3),
            text + " ",
            transform=axes.get_xaxis_transform(),
            ha="right",
            fontsize=8,
        )
    for mark in marks:
        if mark.y is not None:
            axes.axhline(mark.y, color=INK, linestyle=":", linewidth=1)
            axes.text(1, mark.y, mark.label, transform=axes.get_yaxis_transform(), ha="right")
    _axis(axes, "y", axis, series)


def _axis(axes: Axes, along: str, axis: Axis, series: tuple[Series, ...]) -> None:
    """Range, ticks and label as on the page."""
    shown = scale(axis, series, along)
    places, texts = zip(*shown.ticks(MOST_TICKS), strict=True)
    axes.set(**{f"{along}scale": "log" if axis.log else "linear"})
    axes.set(**{f"{along}label": shown.label(axis.label, MOST_TICKS)})
    axes.set(**{f"{along}ticks": places, f"{along}ticklabels": texts})
    axes.set(**{f"{along}lim": (shown.low, shown.high)})
    axes.minorticks_off()


def drawn_master(master: Master) -> Figure:
    """The master in grey with the page's stretch; large ones as means over squares of pixels."""
    rows, columns = master.values.shape
    block = math.ceil(max(rows, columns) / OVERVIEW)
    coded = coding(master.values)
    high = min(max(0.8 * WIDE * rows / columns, 1.5), 9.0)
    figure = Figure(figsize=(WIDE, high + 1.0), layout="constrained")
    FigureCanvasAgg(figure)
    axes = figure.subplots()
    image = axes.imshow(
        master.values if block == 1 else block_mean(master.values, block),
        cmap="gray",
        vmin=coded.low,
        vmax=coded.high,
        origin="lower",
        interpolation="nearest",
        extent=(0.5, columns + 0.5, 0.5, rows + 0.5),
    )
    axes.set(xlabel="x [pixel]", ylabel="y [pixel]")
    unit = unit_text(master.unit)
    figure.colorbar(image, aspect=30, label=f"[{unit}]" if unit else "over the median")
    return figure
