"""Single charge traps of a CCD, found and told apart by pocket pumping."""

from dataclasses import dataclass
from math import sqrt

import numpy as np
from scipy.special import ndtr

from sensorgrade.errors import NotMeasured
from sensorgrade.frames.geometry import Output
from sensorgrade.masters.reduced import StackImage
from sensorgrade.measure.crosstalk import in_reading_order
from sensorgrade.measure.dipoles import Dipoles, Series, filters, find_dipoles, robust_variance
from sensorgrade.measure.emission_fit import Energy, candidates, emission_fits, trap_energy
from sensorgrade.measure.stage import Inputs, Quantity, Stage
from sensorgrade.measurement import Finding, Measurement
from sensorgrade.options import number
from sensorgrade.silicon import ZERO_CELSIUS

SAME_TEMPERATURE = 1.0  # K
SEEN = 3.0  # deviations of one dwell time at which a trap counts as seen
FEWEST_SEEN = 3  # dwell times for an emission time
LARGEST_RELATIVE = 0.2  # uncertainty of an emission time that is stated
FEWEST_TIMES = 3

QUANTITIES = (
    Quantity(
        "trap_density",
        "",
        "Traps per pixel that pocket pumping shows; only those whose emission time lies near the"
        " dwell times used, at the temperatures used",
    ),
)


@dataclass(frozen=True, slots=True, kw_only=True)
class PocketPumpingOptions:
    """Recipe keys under ``stages: pocket_pumping``."""

    window: float = number(
        "Dwell times after capture at which emission into the neighbouring packet ends; it begins"
        " at one. Three phases: 2",
        default=2.0,
        minimum=1.1,
        maximum=20.0,
    )
    threshold: float = number(
        "Deviations of noise from which on a dipole is a trap", default=6.0, minimum=4.0
    )


@dataclass(frozen=True, slots=True)
class Emission:
    """What one temperature tells of a trap: ``tau`` [s] and the probability of ``capture``."""

    temperature: float  # K
    tau: float
    tau_relative: float
    capture: float
    capture_uncertainty: float
    times_seen: int


@dataclass(frozen=True, slots=True)
class Trap:
    """A trap under pixel (``row``, ``column``) of the assembled image, 0-based.

    Its electrons go to the packet on the ``side`` of the register or away from it.
    ``amplitude`` [electron] is the largest seen, ``significance`` its deviations over all dwell
    times; ``emissions`` holds temperatures at which the emission time was resolved; ``energy`` is
    known from two on; ``candidates`` are species with their distance in deviations.
    """

    row: int
    column: int
    output: str
    side: str
    amplitude: float
    amplitude_uncertainty: float
    significance: float
    emissions: tuple[Emission, ...]
    energy: Energy | None
    candidates: tuple[tuple[str, float], ...]


@dataclass(frozen=True, slots=True)
class PocketPumpingResult:
    """``traps`` in the order of row and column; ``threshold`` [deviations] they are past."""

    measurements: tuple[Measurement, ...]
    findings: tuple[Finding, ...]
    traps: tuple[Trap, ...]
    threshold: float


def pocket_pumping(inputs: Inputs, options: PocketPumpingOptions) -> PocketPumpingResult:
    """Traps of every output, with emission times, energies and their density per pixel.

    Raises
    ------
    NotMeasured
        The sensor moves no charge; there are no pumped frames with cycles and dwell time, no
        flats without pumping, or no gain.

    Notes
    -----
    After N cycles a trap that captures with probability Pc has carried

        I = N Pc (exp(-t / tau) - exp(-2 t / tau))

    electrons from its packet to a neighbour (three phases, t the dwell in one; another window may
    be set), so a dark pixel lies beside one as much brighter. The flat, scaled to the same level,
    takes out the response of pixels; its noise is the same at all dwell times and enters the
    covariance. All pairs of rows are filtered for the law at 48 emission times, see
    `dipoles.filters`. An emission time is stated for a trap seen at three or more dwell times;
    with two temperatures or more, ln(tau T²) against 1 / kT gives energy and cross-section.

    Two traps on adjacent rows of a column are told apart only when their dipoles do not overlap.
    Capture is taken to be over within one dwell time.

    References
    ----------
    .. [1] N. J. Murray et al., Proc. SPIE 8453 (2012) (law; from memory).
    .. [2] D. J. Hall et al., IEEE Trans. Nucl. Sci. 61 (2014) 1826 (title and abstract read).
    """
    if inputs.sensor.technology == "cmos":
        raise NotMeasured("does not apply to a CMOS sensor, which reads pixels without moving them")
    pumped = [
        image for image in inputs.reduced.pumped if image.stack.cycles and image.stack.phase_time
    ]
    if not pumped:
        raise NotMeasured(
            "needs frames of kind pump that state cycles and phase time, the set has none"
        )
    if not inputs.reduced.flats or inputs.reduced.bias is None:
        raise NotMeasured("needs bias frames and three or more flats without pumping")
    traps: list[Trap] = []
    measurements = []
    findings: list[Finding] = []
    for output in inputs.reduced.geometry.outputs:
        region = next(r for r in inputs.reduced.geometry.regions if r.output == output.name)
        gain = inputs.measured("conversion_gain", region.scope).value
        series = [_series(inputs, group, output, gain) for group in _by_temperature(pumped)]
        series = [one for one in series if len(one.times) >= FEWEST_TIMES]
        if not series:
            raise NotMeasured(f"needs {FEWEST_TIMES} or more phase times at one temperature")
        found = find_dipoles(series, threshold=options.threshold, window=options.window)
        traps += _traps(output, series, found, options)
        measurements.append(_density(inputs, output, found, options))
    traps.sort(key=lambda trap: (trap.row, trap.column))
    return PocketPumpingResult(
        tuple(measurements), tuple(findings), tuple(traps), options.threshold
    )


def _by_temperature(pumped: list[StackImage]) -> list[list[StackImage]]:
    """Stacks in groups of one temperature, coldest first."""
    groups: list[list[StackImage]] = []
    for image in sorted(pumped, key=_kelvin):
        if not groups or _kelvin(image) - _kelvin(groups[-1][0]) > SAME_TEMPERATURE:
            groups.append([])
        groups[-1].append(image)
    return groups


def _kelvin(image: StackImage) -> float:
    if image.stack.temperature is None:
        raise NotMeasured("needs the temperature of the pumped frames; name it in frames")
    return image.stack.temperature + ZERO_CELSIUS


def _series(inputs: Inputs, group: list[StackImage], output: Output, gain: float) -> Series:
    """The output's excess over a flat at one temperature."""
    assert inputs.reduced.bias is not None
    bias = in_reading_order(inputs.reduced.bias.mean, output)
    lit = [in_reading_order(image.mean, output) - bias for image in group]
    level = float(np.mean([np.median(image) for image in lit]))
    flat = min(
        inputs.reduced.flats,
        key=lambda image: abs(
            float(np.median(in_reading_order(image.mean, output) - bias)) - level
        ),
    )
    reference = in_reading_order(flat.mean, output) - bias
    excess = np.empty((len(group), *reference.shape), np.float32)
    own = np.empty(len(group))
    shares = []
    for at, (image, signal) in enumerate(zip(group, lit, strict=True)):
        share = float(np.median(signal)) / float(np.median(reference))
        excess[at] = gain * (signal - np.float32(share) * reference)
        own[at] = gain**2 * _mean_variance(image, output) / 2
        shares.append(share)
    shared = (gain * float(np.mean(shares))) ** 2 * _mean_variance(flat, output) / 2
    for at in range(len(group)):
        # Whatever else moves pixels between the stacks widens what noise alone would be.
        half = (excess[at, :-1] - excess[at, 1:]) / 2
        own[at] = max(own[at], robust_variance(half) - shared)
    return Series(
        kelvin=float(np.mean([_kelvin(image) for image in group])),
        times=np.array([image.stack.phase_time for image in group], dtype=np.float64),
        cycles=np.array([image.stack.cycles for image in group], dtype=np.float64),
        excess=excess,
        own=own,
        shared=shared,
    )


def _mean_variance(image: StackImage, output: Output) -> float:
    """Mean variance [DN²] of the stack's mean of a pixel."""
    at = output.place.slices
    return float(np.mean(image.variance[at] / np.maximum(image.count[at], 1)))


def _density(
    inputs: Inputs, output: Output, found: Dipoles, options: PocketPumpingOptions
) -> Measurement:
    """Traps per pixel; the chance of each to be past the threshold is known from its noise."""
    past = ndtr(np.abs(found.significance) - options.threshold)
    rows, columns = output.image.shape
    pixels = rows * columns
    scope = f"output {output.name}" if len(inputs.reduced.geometry.outputs) > 1 else "device"
    doubt = sqrt(float((past * (1 - past)).sum()) + 0.25)
    return Measurement("trap_density", scope, len(past) / pixels, doubt / pixels, "", pixels)


def _traps(
    output: Output, series: list[Series], found: Dipoles, options: PocketPumpingOptions
) -> list[Trap]:
    """Each dipole's emission times, and from those its energy."""
    emissions: list[list[Emission]] = [[] for _ in found.rows]
    largest = np.zeros(len(found.rows))
    doubt = np.zeros(len(found.rows))
    sign = np.sign(found.significance)
    for one in series:
        amplitude = one.amplitudes(found.rows, found.columns) * sign[:, None]
        noise = np.sqrt(one.own + one.shared)
        at = np.argmax(amplitude / noise, axis=1)
        height = amplitude[np.arange(len(at)), at]
        larger = height > largest
        largest, doubt = np.where(larger, height, largest), np.where(larger, noise[at], doubt)
        weight, grid = filters(one, options.window)
        start = grid[np.argmax(amplitude @ weight.T, axis=1)]
        fits = emission_fits(
            amplitude, one.times, one.cycles, one.precision, tau=start, window=options.window
        )
        seen = (amplitude > SEEN * noise).sum(axis=1)
        inside = (fits.tau > grid[0]) & (fits.tau < grid[-1])
        told = (seen >= FEWEST_SEEN) & inside & (fits.tau_relative < LARGEST_RELATIVE)
        for k in np.flatnonzero(told):
            emissions[k].append(
                Emission(
                    temperature=one.kelvin,
                    tau=1e-6 * float(fits.tau[k]),
                    tau_relative=float(fits.tau_relative[k]),
                    capture=float(fits.capture[k]),
                    capture_uncertainty=float(fits.capture_uncertainty[k]),
                    times_seen=int(seen[k]),
                )
            )
    return [
        _trap(output, found, k, emissions[k], float(largest[k]), float(doubt[k]))
        for k in range(len(found.rows))
    ]


def _trap(
    output: Output,
    found: Dipoles,
    k: int,
    emissions: list[Emission],
    amplitude: float,
    doubt: float,
) -> Trap:
    toward = found.significance[k] > 0  # the pixel read first gained: charge goes to the register
    row = int(found.rows[k]) + int(toward)  # the trap lies where charge is missing
    energy = None
    if len(emissions) >= 2:
        energy = trap_energy(
            *(
                np.array([getattr(e, name) for e in emissions])
                for name in ("temperature", "tau", "tau_relative")
            )
        )
    place = _assembled(output, row, int(found.columns[k]))
    return Trap(
        row=place[0],
        column=place[1],
        output=output.name,
        side="register" if toward else "away",
        amplitude=amplitude,
        amplitude_uncertainty=doubt,
        significance=float(abs(found.significance[k])),
        emissions=tuple(emissions),
        energy=energy,
        candidates=() if energy is None else candidates(energy.energy, energy.standard_uncertainty),
    )


def _assembled(output: Output, row: int, column: int) -> tuple[int, int]:
    """The pixel of the assembled image that is at ``row`` and ``column`` in reading order."""
    place = output.place
    top, right = output.corner.startswith("top"), output.corner.endswith("right")
    return (
        place.row_stop - 1 - row if top else place.row_start + row,
        place.column_stop - 1 - column if right else place.column_start + column,
    )


STAGE = Stage("pocket_pumping", PocketPumpingOptions, pocket_pumping, QUANTITIES)
