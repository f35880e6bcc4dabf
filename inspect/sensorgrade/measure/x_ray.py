"""Gain and charge transfer from X-rays of known energy, such as an iron-55 source emits."""

from dataclasses import dataclass
from math import hypot, log, sqrt

import numpy as np
from numpy.typing import NDArray

from sensorgrade.errors import NotMeasured
from sensorgrade.frames.geometry import Output
from sensorgrade.masters.reduced import XRayEvents
from sensorgrade.measure.line_fit import LineFit, line_fit
from sensorgrade.measure.stage import Inputs, Quantity, Stage
from sensorgrade.measurement import Finding, Measurement
from sensorgrade.options import number, quantity
from sensorgrade.silicon import (
    K_ALPHA,
    K_BETA,
    PAIR_ENERGY_RELATIVE_UNCERTAINTY,
    ZERO_CELSIUS,
    pair_energy,
)

FWHM = 2 * sqrt(2 * log(2))  # of a normal distribution, in standard deviations
UNKNOWN_TEMPERATURE = 233.15  # K, in the middle of those at which X-rays are taken
UNKNOWN_RELATIVE = 0.007  # of the pair energy, from 173 to 300 K with its own 0.5 %
RATIO_DEVIATIONS = 5.0
ROUNDS = 10
CAUTION = (
    "X-ray sources, sealed ones included, are for licensed people under local rules for radiation"
    " protection"
)

QUANTITIES = (
    Quantity(
        "x_ray_gain",
        "electron / DN",
        "Charge of a photon of the line over the place of the line of events whose charge stayed"
        " in one pixel",
    ),
    Quantity("conversion_gain", "electron / DN", "The same, where no flat pairs gave it before"),
    Quantity("x_ray_width", "eV", "Full width at half maximum of the line"),
    Quantity(
        "x_ray_line_ratio",
        "",
        "Place of the second line over the first's; another value than that of their energies"
        " shows an offset or a response that bends",
    ),
    Quantity(
        "cti_parallel",
        "",
        "Share of charge lost by one transfer from row to row, from the fall of the line with the"
        " row number",
    ),
    Quantity(
        "cti_serial",
        "",
        "Share of charge lost by one transfer along the serial register, from the fall of the line"
        " with the column number",
    ),
)


@dataclass(frozen=True, slots=True, kw_only=True)
class XRayOptions:
    """Recipe keys under ``stages: x_ray``; the source is iron-55 unless energies are given."""

    energy: float = quantity(
        "eV", "Energy of the strongest line", default=K_ALPHA.value, minimum=500.0, maximum=3e4
    )
    second_energy: float = quantity(
        "eV", "Energy of the second line", default=K_BETA.value, minimum=500.0, maximum=3e4
    )
    pair_energy: float | None = quantity(
        "eV",
        "Energy for one electron in silicon; omit for that of the sensor's temperature",
        default=None,
        minimum=3.0,
        maximum=5.0,
    )
    split: float = number(
        "Deviations of the noise past which a neighbour holds part of the charge",
        default=3.0,
        minimum=1.0,
        maximum=10.0,
    )


@dataclass(frozen=True, slots=True)
class OutputLine:
    """The line in one output: E single events used.

    ``values`` (E,) [DN] of the pixel itself, ``sums`` (E,) of its 3 x 3 pixels, ``transfers``
    (E, 2) parallel and serial; ``fit`` of values with transfers, ``whole`` of sums.
    """

    output: str
    events: int
    values: NDArray[np.float64]
    sums: NDArray[np.float64]
    transfers: NDArray[np.float64]
    fit: LineFit
    whole: LineFit


@dataclass(frozen=True, slots=True)
class XRayResult:
    """Gain and charge transfer of every output."""

    measurements: tuple[Measurement, ...]
    findings: tuple[Finding, ...]
    lines: tuple[OutputLine, ...]


def x_ray(inputs: Inputs, options: XRayOptions) -> XRayResult:
    """Gain [electron/DN], transfer inefficiency and line width [eV] of every output.

    Raises
    ------
    NotMeasured
        There are no X-ray frames, or too few events about the line.

    Notes
    -----
    A photon of energy E frees E / w electrons, w the energy for one pair. An event counts as
    single when no neighbour is past the split threshold; what is expected to trail into the two
    neighbours read after it, from a first fit, does not count against it. Gain comes from the
    sums of the 3 x 3 pixels of single events, so that neither charge below the threshold nor
    charge one transfer late is missing; transfer inefficiency from the pixel itself,
    S(n) = S0 exp(-CTI n). Pixels that give events in more frames than chance allows are left out.
    The gain's uncertainty holds that of w, 0.5 %, which is common to all outputs and devices.

    References
    ----------
    .. [1] J. R. Janesick, Scientific Charge-Coupled Devices, SPIE Press, 2001 (from memory).
    .. [2] K. Ramanathan, N. Kurinsky, Phys. Rev. D 102 (2020) 063026 (w and its temperature).
    """
    if not inputs.reduced.x_rays:
        raise NotMeasured("needs frames of kind x-ray, the set has none")
    pair, relative = _pair_energy(inputs.reduced.x_rays[0], options)
    lines, measurements, findings = [], [], [_caution()]
    refused: list[str] = []
    for output in inputs.reduced.geometry.outputs:
        scope = f"output {output.name}" if len(inputs.reduced.geometry.outputs) > 1 else "device"
        try:
            line = _line(inputs, output, options)
        except NotMeasured as reason:
            refused.append(str(reason))
            findings.append(_lacking(scope, str(reason)))
            continue
        lines.append(line)
        measurements += _measurements(inputs, line, scope, options, pair, relative)
        findings += _against_ratio(line, scope, options)
    if not lines:
        raise NotMeasured(refused[0])
    return XRayResult(tuple(measurements), tuple(findings), tuple(lines))


def _pair_energy(events: XRayEvents, options: XRayOptions) -> tuple[float, float]:
    """Energy for one electron [eV] and its relative standard uncertainty."""
    relative = PAIR_ENERGY_RELATIVE_UNCERTAINTY.value
    if options.pair_energy is not None:
        return options.pair_energy, relative
    if events.stack.temperature is None:
        return pair_energy(UNKNOWN_TEMPERATURE), UNKNOWN_RELATIVE
    return pair_energy(events.stack.temperature + ZERO_CELSIUS), relative


def _line(inputs: Inputs, output: Output, options: XRayOptions) -> OutputLine:
    """Single events of one output and the line fitted to them."""
    parts = [events for events in inputs.reduced.x_rays if events.output == output.name]
    islands = np.concatenate([part.islands for part in parts]).astype(np.float64)
    place = np.concatenate([np.column_stack([part.rows, part.columns]) for part in parts])
    frames = sum(len(part.stack.frames) for part in parts)
    threshold = options.split * parts[0].noise
    prescan = 0 if output.prescan is None else output.prescan.shape[1]
    transfers = place + np.array([1.0, 1.0 + prescan])
    if inputs.sensor.technology == "cmos":
        transfers = transfers[:, :0]
    fresh = _not_recurring(place, output.image.shape, frames)
    islands, transfers = islands[fresh], transfers[fresh]
    ratio = options.second_energy / options.energy
    late = np.zeros((len(islands), 2))
    single = np.zeros(len(islands), dtype=bool)
    for _ in range(ROUNDS):  # with what trails into the pixels read next, found the round before
        before, single = single, _single(islands, late, threshold)
        if (before == single).all() and before.any():
            break
        fit = line_fit(islands[single, 1, 1], transfers[single], ratio=ratio, fit_ratio=False)
        if transfers.shape[1]:
            loss = np.maximum(fit.parameters[1:], 0.0)
            late = islands[:, 1, 1, None] * -np.expm1(-transfers * loss)
    values, sums = islands[single, 1, 1], islands[single].sum(axis=(1, 2))
    whole = line_fit(sums, transfers[single][:, :0], ratio=ratio, fit_ratio=True)
    return OutputLine(output.name, len(fresh), values, sums, transfers[single], fit, whole)


def _not_recurring(
    place: NDArray[np.int64], shape: tuple[int, int], frames: int
) -> NDArray[np.bool_]:
    """Which events lie in pixels that give no more of them than chance would; hot pixels do.

    With a mean of m events per pixel, a pixel of the sensor has more than the limit by chance
    less than once in a hundred devices (Poisson tail m^k / k!).
    """
    index = place[:, 0] * shape[1] + place[:, 1]
    counts = np.bincount(index, minlength=shape[0] * shape[1])
    mean = len(index) / counts.size
    limit, tail = 1, mean
    while tail * counts.size > 0.01 and limit < frames:
        limit += 1
        tail *= mean / limit
    kept: NDArray[np.bool_] = counts[index] < max(limit, 2)
    return kept


def _single(
    islands: NDArray[np.float64], late: NDArray[np.float64], threshold: float
) -> NDArray[np.bool_]:
    """Events none of whose neighbours holds charge but what trails there by late transfer."""
    expected = np.zeros_like(islands)
    expected[:, 2, 1], expected[:, 1, 2] = late[:, 0], late[:, 1]
    beyond = islands - expected
    beyond[:, 1, 1] = 0.0
    single: NDArray[np.bool_] = beyond.max(axis=(1, 2)) <= threshold
    return single


def _measurements(
    inputs: Inputs,
    line: OutputLine,
    scope: str,
    options: XRayOptions,
    pair: float,
    relative: float,
) -> list[Measurement]:
    peak, peak_error = line.whole.parameters[0], sqrt(line.whole.covariance[0, 0])
    n = line.whole.events
    gain = options.energy / pair / peak
    doubt = gain * hypot(peak_error / peak, relative)
    width = FWHM * line.fit.width / line.fit.parameters[0] * options.energy
    found = [
        Measurement("x_ray_gain", scope, gain, doubt, "electron / DN", n),
        Measurement("x_ray_width", scope, width, width / sqrt(2 * n), "eV", n),
        Measurement(
            "x_ray_line_ratio",
            scope,
            line.whole.parameters[1],
            sqrt(line.whole.covariance[1, 1]),
            "",
            n,
        ),
    ]
    try:
        inputs.measured("conversion_gain", scope)
    except NotMeasured:
        found.append(Measurement("conversion_gain", scope, gain, doubt, "electron / DN", n))
    for at, name in enumerate(("cti_parallel", "cti_serial")[: line.transfers.shape[1]], start=1):
        loss = float(line.fit.parameters[at])
        error = sqrt(line.fit.covariance[at, at])
        found.append(Measurement(name, scope, loss, error, "", line.fit.events))
    return found


def _against_ratio(line: OutputLine, scope: str, options: XRayOptions) -> list[Finding]:
    """A finding when the second line is not where the energies have it."""
    ratio, error = line.whole.parameters[1], sqrt(line.whole.covariance[1, 1])
    expected = options.second_energy / options.energy
    if abs(ratio - expected) <= RATIO_DEVIATIONS * error:
        return []
    return [
        Finding(
            severity="warning",
            where=f"x_ray, {scope}",
            seen=(
                f"the second line lies at {ratio:.4f} of the first, their energies have it at"
                f" {expected:.4f}"
            ),
            remedy="look for an offset that was not taken off, or a response that bends",
        )
    ]


def _caution() -> Finding:
    return Finding("note", "x_ray", CAUTION, "follow the rules of your laboratory")


def _lacking(scope: str, reason: str) -> Finding:
    return Finding(
        severity="warning",
        where=f"x_ray, {scope}",
        seen=reason,
        remedy="take more X-ray frames, or grade without this output",
        undecides=("x_ray_gain", "cti_parallel", "cti_serial"),
    )


STAGE = Stage("x_ray", XRayOptions, x_ray, QUANTITIES)
