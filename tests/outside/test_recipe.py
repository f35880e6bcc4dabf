"""Sections and quantities of recipes against conventions and libraries from outside."""

import astropy.units as u
import numpy as np
import pytest
from astropy.io import fits

from sensorgrade.recipe.quantities import quantity
from sensorgrade.recipe.section import section


def test_sections_name_the_pixels_that_the_convention_says(outside):
    # DATASEC "[51:2098,1:2048]" and BIASSEC "[1:50,1:2048]" of a frame with 2098 x 2048 pixels.
    for text, expected in (
        ("[51:2098,1:2048]", [0, 2048, 50, 2098]),
        ("[1:50,1:2048]", [0, 2048, 0, 50]),
    ):
        rows, columns = section(text).slices
        outside(
            f"first and last row and column of {text}, half-open",
            source="FITS section convention (x first, 1-based, inclusive)",
            standing="confirmed",
            expected=expected,
            found=[rows.start, rows.stop, columns.start, columns.stop],
        )


@pytest.mark.parametrize("text", ["[3:7,2:4]", "[1:1,1:1]", "[10:12,5:9]"])
def test_a_section_takes_the_pixels_that_astropy_takes(outside, tmp_path, text):
    image = np.arange(10 * 12).reshape(10, 12)
    fits.PrimaryHDU(image).writeto(tmp_path / "a.fits")
    x, y = (part.split(":") for part in text.strip("[]").split(","))
    with fits.open(tmp_path / "a.fits") as units:
        taken = units[0].section[int(y[0]) - 1 : int(y[1]), int(x[0]) - 1 : int(x[1])]
    outside(
        f"pixels of section {text}",
        source="astropy.io.fits section of the same file",
        standing="library",
        expected=taken,
        found=image[section(text).slices],
    )


@pytest.mark.parametrize(
    "text, unit", [("0.1 mm", "um"), ("18 electron/h", "electron/s"), ("2 nA/cm2", "pA/mm2")]
)
def test_quantities_convert_as_astropy_converts_them(outside, text, unit):
    outside(
        f"{text} in {unit}",
        source="astropy.units.Quantity.to",
        standing="library",
        expected=u.Quantity(text).to_value(unit),
        found=quantity(text, unit),
        rtol=1e-11,
    )


def test_the_zero_of_the_celsius_scale(outside):
    outside(
        "0 degC in K, by way of 273.15 K in degC",
        source="SI Brochure, 9th edition, 2.3.1: t/degC = T/K - 273.15",
        standing="from memory",
        expected=0.0,
        found=quantity("273.15 K", "degC"),
    )
