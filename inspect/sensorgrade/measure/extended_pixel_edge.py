"""Charge transfer inefficiency from the charge that flats leave in the overscan."""

from dataclasses import dataclass
from math import sqrt

import numpy as np
from numpy.typing import NDArray
from scipy.special import gammainccinv

from sensorgrade.errors import NotMeasured
from sensorgrade.frames.geometry import Output
from sensorgrade.masters.reduced import Trails
from sensorgrade.measure.stage import Inputs, Quantity, Stage
from sensorgrade.measurement import Finding, Measurement
from sensorgrade.options import number, quantity

DIRECTIONS = ("parallel", "serial")
FEWEST_OVERSCAN = 4  # pixels: half of them tell the level without charge, and how it scatters
CHANCE = 0.01  # that scatter which is but noise makes the uncertainty larger

QUANTITIES = (
    Quantity(
        "cti_parallel",
        "",
        "Share of charge left behind by one transfer from row to row, from the charge deferred into"
        " the parallel overscan",
    ),
    Quantity(
        "cti_serial",
        "",
        "Share of charge left behind by one transfer along the serial register, from the charge"
        " deferred into the serial overscan",
    ),
)


@dataclass(frozen=True, slots=True, kw_only=True)
class ChargeTransferOptions:
    """Recipe keys under ``stages: charge_transfer``."""

    lower: float = quantity(
        "%", "Least signal used, of saturation", default=5.0, minimum=0.1, maximum=80.0
    )
    upper: float = quantity(
        "%", "Greatest signal used, of saturation", default=90.0, minimum=10.0, maximum=100.0
    )
    pixels: int | None = number(
        "Overscan pixels whose charge counts as deferred; omit for the nearer half",
        default=None,
        minimum=1,
    )


@dataclass(frozen=True, slots=True)
class TransferCurve:
    """Deferred charge of one output in one direction, at L levels in the order of signal.

    ``signal`` (L,) [DN] before the edge, ``deferred`` (L,) [DN] in all pixels counted, ``first``
    (L,) [DN] in the first one alone, ``inefficiency`` (L,) per transfer with its
    ``standard_uncertainty`` (L,); ``used`` (L,) those that the measurement joins.
    """

    output: str
    direction: str
    transfers: int
    signal: NDArray[np.float64]
    deferred: NDArray[np.float64]
    first: NDArray[np.float64]
    inefficiency: NDArray[np.float64]
    standard_uncertainty: NDArray[np.float64]
    used: NDArray[np.bool_]


@dataclass(frozen=True, slots=True)
class ChargeTransferResult:
    """Inefficiency of every output and direction that has an overscan."""

    measurements: tuple[Measurement, ...]
    findings: tuple[Finding, ...]
    curves: tuple[TransferCurve, ...]


@dataclass(frozen=True, slots=True)
class Edge:
    """Profile across one edge [DN]: image pixels, then the overscan; ``error`` of its mean."""

    profile: NDArray[np.float64]
    error: NDArray[np.float64]
    image_pixels: int

    @property
    def signal(self) -> float:
        """Mean of the image pixels before the edge."""
        return float(self.profile[: self.image_pixels].mean())

    @property
    def overscan(self) -> NDArray[np.float64]:
        """Pixels beyond the edge, less the mean of their far half."""
        return self.profile[self.image_pixels :]

    @property
    def far(self) -> int:
        """Pixels of the far half, whose mean was taken as the level without charge."""
        return len(self.overscan) // 2

    @property
    def noise(self) -> float:
        """Variance [DN²] of one overscan pixel of the profile, from those of the far half."""
        errors = self.error[len(self.error) - self.far :]
        # Their own mean was taken out, which made them scatter less.
        return float((errors**2).mean()) * self.far / (self.far - 1)

    def deferred(self, pixels: int) -> tuple[float, float]:
        """Charge in the first ``pixels`` beyond the edge [DN], and its variance [DN²].

        The level without charge enters every pixel alike, so its variance counts squared.
        """
        level = self.noise / self.far
        own = self.error[self.image_pixels : self.image_pixels + pixels] ** 2 - level
        variance = float(np.maximum(own, self.noise).sum()) + pixels**2 * level
        return float(self.overscan[:pixels].sum()), variance


def charge_transfer(inputs: Inputs, options: ChargeTransferOptions) -> ChargeTransferResult:
    """Parallel and serial inefficiency (per pixel transfer) of every output.

    Raises
    ------
    NotMeasured
        The sensor moves no charge, or has no overscan, or no flat lies in the range of signal.

    Notes
    -----
    Charge that the last pixels of an image left behind comes out in the pixels clocked beyond it.
    Balance of charge gives, for a flat and n transfers of the last image pixel,

        CTI = deferred / (signal n),

    deferred summed over the overscan pixels counted, however many transfers they spread over; the
    first pixel alone reads low, by 10 % at CTI = 1e-4 and n = 2048. What bias frames show
    at the same place (settling of the amplifier or the clocks) is taken out. Levels are joined
    with weights (signal n)² / variance. Where they differ by more than their noise, since traps
    hold a larger share of small packets, the uncertainty grows by the excess; `curves` has them
    one by one.

    Only charge released within the pixels counted is seen: slower traps need X-rays or a leading
    edge. What an amplifier's settling takes over from one pixel to the next in proportion to
    signal is not told apart from serial inefficiency; it makes ``cti_serial`` too large.

    References
    ----------
    .. [1] J. R. Janesick et al., Opt. Eng. 26 (1987) 692 (extended pixel edge response; from
       memory). The sum over all deferred pixels follows from balance of charge.
    """
    if inputs.sensor.technology == "cmos":
        raise NotMeasured("does not apply to a CMOS sensor, which reads pixels without moving them")
    outputs = inputs.reduced.geometry.outputs
    if not any(output.overscan or output.parallel_overscan for output in outputs):
        raise NotMeasured(
            "needs an overscan, where deferred charge comes out; this sensor has none"
        )
    curves, measurements, findings = [], [], []
    for output in outputs:
        for direction in DIRECTIONS:
            try:
                curve, excess = _curve(inputs, output, direction, options)
            except NotMeasured as reason:
                findings.append(_lacking(inputs, output, direction, str(reason)))
                continue
            curves.append(curve)
            found = _joined(inputs, curve, excess)
            if (known := _known(inputs, found)) is None:
                measurements.append(found)
            else:
                findings.append(_beside(found, known))
    if not curves:
        raise NotMeasured("; ".join(dict.fromkeys(finding.seen for finding in findings)))
    return ChargeTransferResult(tuple(measurements), tuple(findings), tuple(curves))


def _curve(
    inputs: Inputs, output: Output, direction: str, options: ChargeTransferOptions
) -> tuple[TransferCurve, float]:
    """Deferred charge level by level, and the variance [DN²] that all levels share."""
    section = output.overscan if direction == "serial" else output.parallel_overscan
    axis = 1 if direction == "serial" else 0
    if section is None:
        raise NotMeasured(f"the output has no {direction} overscan")
    size = section.shape[axis]
    if size < FEWEST_OVERSCAN:
        raise NotMeasured(
            f"needs {FEWEST_OVERSCAN} or more pixels of {direction} overscan, it has {size}"
        )
    own = [trails for trails in inputs.reduced.trails if trails.output == output.name]
    flats = sorted(
        (_edge(trails, direction) for trails in own if trails.stack.kind == "flat"),
        key=lambda edge: edge.signal,
    )
    if not flats:
        raise NotMeasured("needs flats, the set has none")
    bias = next((_edge(t, direction) for t in own if t.stack.kind == "bias"), None)
    pixels = min(options.pixels or size, size - size // 2)
    transfers = output.transfers()[axis]
    signal = np.array([edge.signal for edge in flats])
    used = _used(inputs, output, signal, options)
    if not used.any():
        raise NotMeasured(
            f"needs flats between {options.lower:g} and {options.upper:g} % of saturation"
        )
    unlit, shared = (0.0, 0.0) if bias is None else bias.deferred(pixels)
    first = 0.0 if bias is None else float(bias.overscan[0])
    deferred, variance = np.array([edge.deferred(pixels) for edge in flats]).T
    excess = _excess([edge for edge, use in zip(flats, used, strict=True) if use], bias)
    variance, shared = variance * excess, shared * excess
    lever = np.maximum(signal, np.finfo(float).tiny) * transfers
    curve = TransferCurve(
        output=output.name,
        direction=direction,
        transfers=transfers,
        signal=signal,
        deferred=deferred - unlit,
        first=np.array([edge.overscan[0] for edge in flats]) - first,
        inefficiency=(deferred - unlit) / lever,
        standard_uncertainty=np.sqrt(variance + shared) / lever,
        used=used,
    )
    return curve, shared


def _edge(trails: Trails, direction: str) -> Edge:
    if direction == "serial":
        return Edge(trails.serial, trails.serial_uncertainty, trails.image_pixels)
    return Edge(trails.parallel, trails.parallel_uncertainty, trails.image_pixels)


def _used(
    inputs: Inputs, output: Output, signal: NDArray[np.float64], options: ChargeTransferOptions
) -> NDArray[np.bool_]:
    """Which levels lie in the range; up to the brightest where saturation was not reached."""
    scope = next(r.scope for r in inputs.reduced.geometry.regions if r.output == output.name)
    try:
        capacity = inputs.measured("saturation_capacity", scope).value
        top = capacity / inputs.measured("conversion_gain", scope).value
    except NotMeasured:
        top = np.inf
    lowest = options.lower / 100 * min(top, float(signal.max()))
    within: NDArray[np.bool_] = (signal >= lowest) & (signal <= options.upper / 100 * top)
    return within


def _excess(flats: list[Edge], bias: Edge | None) -> float:
    """Factor by which the overscan's far pixels scatter more than their noise, 1 or more.

    Row noise, and a pattern that bias frames do not share, move whole lines of the profile; they
    show in its scatter from pixel to pixel, not in that from line to line.
    """
    squares, degrees = 0.0, 0
    for edge in flats:
        far = edge.overscan[len(edge.overscan) - edge.far :]
        noise = edge.noise
        if bias is not None:
            far = far - bias.overscan[len(edge.overscan) - edge.far :]
            noise += bias.noise
        if noise > 0:
            squares += float(((far - far.mean()) ** 2).sum()) / noise
            degrees += edge.far - 1
    return _beyond_noise(squares, degrees)


def _beyond_noise(squares: float, degrees: int) -> float:
    """chi² over its degrees of freedom where that is beyond what noise explains, else 1."""
    if degrees == 0 or squares <= 2 * float(gammainccinv(degrees / 2, CHANCE)):
        return 1.0
    return squares / degrees


def _joined(inputs: Inputs, curve: TransferCurve, shared: float) -> Measurement:
    """Weighted mean over the levels used; ``shared`` is the bias frames' variance [DN²]."""
    lever = curve.signal[curve.used] * curve.transfers
    found = curve.inefficiency[curve.used]
    variance = (curve.standard_uncertainty[curve.used] * lever) ** 2 - shared
    weight = lever**2 / variance
    value = float(weight @ found / weight.sum())
    own = 1 / float(weight.sum())
    common = shared * float((weight / lever).sum() / weight.sum()) ** 2
    squares = float(weight @ (found - value) ** 2)
    own *= _beyond_noise(squares, len(found) - 1)
    scope = f"output {curve.output}" if len(inputs.reduced.geometry.outputs) > 1 else "device"
    return Measurement(f"cti_{curve.direction}", scope, value, sqrt(own + common), "", len(found))


def _known(inputs: Inputs, found: Measurement) -> Measurement | None:
    """What X-rays have measured of the same; they see slow traps too, so theirs stands."""
    try:
        return inputs.measured(found.name, found.scope)
    except NotMeasured:
        return None


def _beside(found: Measurement, known: Measurement) -> Finding:
    return Finding(
        severity="note",
        where=f"charge_transfer, {found.scope}",
        seen=(
            f"{found.name} from overscan is {found.value:.3g}, with standard uncertainty"
            f" {found.standard_uncertainty:.2g}; that of X-rays, {known.value:.3g}, stands"
        ),
        remedy="overscan sees only what is released soon; a large difference shows slow traps",
    )


def _lacking(inputs: Inputs, output: Output, direction: str, reason: str) -> Finding:
    named = f", output {output.name}" if len(inputs.reduced.geometry.outputs) > 1 else ""
    return Finding(
        severity="note",
        where=f"charge_transfer{named}",
        seen=f"cti_{direction} was not measured: {reason}",
        remedy="set no limit on it, or take frames that show it",
        undecides=(f"cti_{direction}",),
    )


STAGE = Stage("charge_transfer", ChargeTransferOptions, charge_transfer, QUANTITIES)
