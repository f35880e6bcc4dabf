"""Spatial parts as measurements: their roots, with a note for each part that is not resolved."""

from math import hypot, sqrt

from sensorgrade.measure.spatial_noise import Part, SpatialNoise
from sensorgrade.measure.stage import Quantity
from sensorgrade.measurement import Finding, Measurement

RESOLVED = 2.0  # standard errors by which a variance must exceed zero to have a root


def part_quantities(name: str, shading: str, unit: str, of: str) -> tuple[Quantity, ...]:
    """The quantities that `part_measurements` makes, ``of`` being what is uneven."""
    return (
        Quantity(
            name,
            unit,
            f"Standard deviation over pixels of {of}: row, column and pixel parts together;"
            " temporal noise, shading and pixels past 5 deviations taken out",
        ),
        Quantity(f"{name}_row", unit, f"The part of {of} that is shared by a row"),
        Quantity(f"{name}_column", unit, f"The part of {of} that is shared by a column"),
        Quantity(f"{name}_pixel", unit, f"The part of {of} that is each pixel's own"),
        Quantity(f"{name}_all_pixels", unit, f"As {name}, with no pixel left out"),
        Quantity(
            shading,
            unit,
            f"Standard deviation of the slow part of {of}: a polynomial surface of degree 6",
        ),
    )


def part_measurements(
    noise: SpatialNoise,
    quantities: tuple[Quantity, ...],
    *,
    scope: str,
    stage: str,
    factor: float,
    relative_error: float,
) -> tuple[tuple[Measurement, ...], tuple[Finding, ...]]:
    """Roots of the parts, in the order of ``quantities``, times ``factor``.

    Parameters
    ----------
    noise : SpatialNoise
    quantities : as `part_quantities` makes them
    factor : float
        From the image's unit to that of the quantities.
    relative_error : float
        Relative standard uncertainty of ``factor``.

    Notes
    -----
    A variance that does not exceed zero by two of its standard errors has no root to state: a
    note gives the upper limit instead.
    """
    parts: tuple[Part, ...] = (
        noise.total,
        noise.row,
        noise.column,
        noise.pixel,
        noise.all_pixels,
        noise.shading,
    )
    measurements: list[Measurement] = []
    findings: list[Finding] = []
    for quantity, part in zip(quantities, parts, strict=True):
        if part.variance > RESOLVED * part.standard_error:
            root = sqrt(part.variance)
            doubt = hypot(part.standard_error / (2 * root), root * relative_error)
            measurements.append(
                Measurement(
                    quantity.name,
                    scope,
                    root * factor,
                    doubt * factor,
                    quantity.unit,
                    part.degrees,
                )
            )
            continue
        limit = factor * sqrt(max(part.variance, 0.0) + RESOLVED * part.standard_error)
        findings.append(
            Finding(
                severity="note",
                where=f"{stage}, {scope}",
                seen=f"{quantity.name} is not resolved; it is below {limit:.2g} {quantity.unit}",
                remedy="more frames in the stack would tell",
                undecides=(quantity.name,),
            )
        )
    return tuple(measurements), tuple(findings)
