"""``sensorgrade mask``: defect masks in the form that the readout downstream needs."""

import json
from dataclasses import asdict
from pathlib import Path
from typing import TYPE_CHECKING

import click

if TYPE_CHECKING:
    from collections.abc import Sequence

    from sensorgrade.defects.mask_edit import BitDifference
    from sensorgrade.recipe.model import Section

DIFFERENT = 1


@click.command(
    epilog="\b\nExamples:\n"
    "  sensorgrade mask lot/0001/mask.fits\n"
    "  sensorgrade mask lot/0001/mask.fits --without warm --grow hot=1 --out bad.npy\n"
    "  sensorgrade mask lot/0001/mask.fits --crop '[1:64,1:32]' --bin 2x2 --out small.fits\n"
    "  sensorgrade mask monday.fits friday.fits --out both.fits\n"
    "  sensorgrade mask monday.fits --compare friday.fits\n\n"
    "Exit status: 0 done; 1 compared masks differ; 2 the request is wrong."
)
@click.argument("files", nargs=-1, required=True, type=click.Path(path_type=Path))
@click.option("--bits", help="Keep these bits only, such as hot,column.")
@click.option("--without", help="Leave these bits out.")
@click.option(
    "--grow", multiple=True, metavar="BIT=PIXELS", help="Widen what carries a bit; may be repeated."
)
@click.option("--crop", metavar="'[x1:x2,y1:y2]'", help="Cut a window, in FITS pixels from 1.")
@click.option(
    "--flip", type=click.Choice(["rows", "columns"]), multiple=True, help="Reverse an axis."
)
@click.option(
    "--rotate",
    type=click.Choice(["0", "90", "180", "270"]),
    default="0",
    help="Turn counterclockwise, as seen with row 1 at the bottom [degree].",
)
@click.option("--bin", "binning", metavar="XxY", help="Join pixels, such as 2x2; columns first.")
@click.option("--zero-one", is_flag=True, help="Write FITS of 0 and 1 (bad) in place of the bits.")
@click.option(
    "--out",
    type=click.Path(path_type=Path),
    help="File to write: .fits, .npy (True where bad), .csv (list of pixels) or .png.",
)
@click.option(
    "--compare", type=click.Path(path_type=Path), help="Compare with this mask, bit by bit."
)
@click.option("--json", "as_json", is_flag=True, help="Print JSON instead of text.")
@click.option("--quiet", is_flag=True, help="Print nothing.")
@click.pass_context
def command(
    ctx: click.Context,
    files: tuple[Path, ...],
    bits: str | None,
    without: str | None,
    grow: tuple[str, ...],
    crop: str | None,
    flip: tuple[str, ...],
    rotate: str,
    binning: str | None,
    zero_one: bool,
    out: Path | None,
    compare: Path | None,
    as_json: bool,
    quiet: bool,
) -> None:
    """Join the masks FILES, change them, and write or compare what they become.

    Steps run in the order of the options: bits, grow, crop, flip, rotate, bin. A pixel of a
    binned mask is bad when any of its pixels is. Without --out or --compare the pixels of each
    bit are counted.
    """
    from sensorgrade.defects.bits import pixels_by_bit
    from sensorgrade.defects.mask_edit import Edit, differences, edited, merged
    from sensorgrade.defects.mask_export import export_mask
    from sensorgrade.defects.mask_file import mask_serial, read_mask

    edit = Edit(
        bits=_names(bits),
        without=_names(without),
        grow=dict(_growth(one) for one in grow),
        crop=None if crop is None else _window(crop),
        flip=flip,
        rotate=int(rotate),
        bin=(1, 1) if binning is None else _bins(binning),
    )
    mask = edited(merged([read_mask(file)[1] for file in files]), edit)
    if out is not None:
        export_mask(out, mask, serial=mask_serial(files[0]), zero_one=zero_one)
    if compare is not None:
        found = differences(mask, edited(read_mask(compare)[1], edit))
        if not quiet:
            _print_differences(found, as_json=as_json)
        ctx.exit(DIFFERENT if any(one.first_only or one.second_only for one in found) else 0)
    if not quiet:
        rows, columns = mask.shape
        counts = pixels_by_bit(mask)
        bad = int((mask > 0).sum())
        if as_json:
            click.echo(json.dumps({"rows": rows, "columns": columns, "bad": bad, "bits": counts}))
        else:
            click.echo(f"{columns} x {rows} pixels (x by y), {bad} bad")
            for name, count in counts.items():
                click.echo(f"{name:10} {count:>10}")


def _names(text: str | None) -> tuple[str, ...]:
    return () if text is None else tuple(name.strip() for name in text.split(","))


def _growth(text: str) -> tuple[str, int]:
    name, _, pixels = text.partition("=")
    if not pixels.isdecimal():
        raise click.BadParameter(f"expected a bit and pixels, as in hot=1, found {text!r}")
    return name.strip(), int(pixels)


def _bins(text: str) -> tuple[int, int]:
    across, _, down = text.lower().partition("x")
    if not (across.isdecimal() and down.isdecimal() and int(across) and int(down)):
        raise click.BadParameter(f"--bin: expected columns x rows, as in 2x2, found {text!r}")
    return int(down), int(across)


def _window(text: str) -> "Section":
    from sensorgrade.recipe.section import WrongSection, section

    try:
        return section(text)
    except WrongSection as wrong:
        raise click.BadParameter(f"--crop: {text}: {wrong}") from wrong


def _print_differences(found: "Sequence[BitDifference]", *, as_json: bool) -> None:
    if as_json:
        click.echo(json.dumps([asdict(one) for one in found]))
        return
    click.echo(f"{'bit':10} {'in both':>10} {'first only':>10} {'second only':>11}")
    for one in found:
        click.echo(f"{one.bit:10} {one.both:>10} {one.first_only:>10} {one.second_only:>11}")
