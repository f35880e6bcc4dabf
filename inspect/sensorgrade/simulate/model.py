"""What a simulated sensor is like: every parameter with its unit, readable from YAML."""

from dataclasses import dataclass

from sensorgrade.options import choice, entry, number, quantity
from sensorgrade.recipe.model import Sensor


@dataclass(frozen=True, slots=True, kw_only=True)
class Amplifier:
    """One output's chain from charge to number."""

    conversion_gain: float = quantity(
        "electron / DN", "Charge for one DN, at small signal", default=2.0, minimum=1e-3
    )
    read_noise: float = quantity("electron", "Noise of one sample", default=5.0, minimum=0.0)
    bias_level: float = quantity("DN", "Mean level without charge", default=1000.0, minimum=0.0)
    bias_drift: float = quantity(
        "DN", "Standard deviation of the level from frame to frame", default=0.0, minimum=0.0
    )
    curvature: float = quantity(
        "%",
        "Output lost at full well: output = charge (1 - curvature * charge / full well) / gain",
        default=0.0,
        minimum=-40.0,
        maximum=40.0,
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class Response:
    """How the response to light differs from place to place; standard deviations."""

    pixel: float = quantity("%", "From pixel to pixel", default=0.0, minimum=0.0)
    row: float = quantity("%", "From row to row", default=0.0, minimum=0.0)
    column: float = quantity("%", "From column to column", default=0.0, minimum=0.0)
    red: float = quantity("%", "Transmission of red filters", default=100.0, minimum=0.0)
    green: float = quantity("%", "Transmission of green filters", default=100.0, minimum=0.0)
    blue: float = quantity("%", "Transmission of blue filters", default=100.0, minimum=0.0)


@dataclass(frozen=True, slots=True, kw_only=True)
class DarkSignal:
    """Dark current at the reference temperature and how it differs from pixel to pixel.

    It follows temperature by the generation law of silicon, alike in all pixels.
    """

    current: float = quantity("electron / s", "Mean of the pixels", default=0.0, minimum=0.0)
    reference: float = quantity("deg_C", "Temperature it holds for", default=20.0, minimum=-200.0)
    nonuniformity: float = quantity(
        "%", "Gaussian part: standard deviation over the mean", default=0.0, minimum=0.0
    )
    tail_fraction: float = quantity(
        "%", "Share of pixels in the exponential tail", default=0.0, minimum=0.0, maximum=100.0
    )
    tail_mean: float = quantity(
        "electron / s", "Mean excess of the pixels in the tail", default=0.0, minimum=0.0
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class Offsets:
    """Structure of frames without charge: fixed from pixel to pixel, new in every frame."""

    pixel: float = quantity("electron", "Fixed, from pixel to pixel", default=0.0, minimum=0.0)
    column: float = quantity("electron", "Fixed, from column to column", default=0.0, minimum=0.0)
    row_noise: float = quantity(
        "electron", "New in every frame, shared by the samples of a row", default=0.0, minimum=0.0
    )
    pickup: float = quantity(
        "electron", "Amplitude of a sine along the rows", default=0.0, minimum=0.0
    )
    pickup_period: float = number("Period of the pickup in pixels", default=16.0, minimum=2.0)


@dataclass(frozen=True, slots=True, kw_only=True)
class Events:
    """Particles that cross the sensor: rate, and the charge they leave along their tracks."""

    rate: float = quantity("1 / (cm2 min)", "Tracks through the sensor", default=0.0, minimum=0.0)
    thickness: float = quantity("um", "Depth that collects charge", default=15.0, minimum=0.1)
    charge: float = quantity(
        "electron / um", "Most probable charge along the track", default=80.0, minimum=0.0
    )


DEFECT_KINDS = (
    "hot",
    "warm",
    "dead",
    "dim",
    "bright",
    "noisy",
    "telegraph",
    "stuck",
    "nonlinear",
    "gain",
    "trap",
)


@dataclass(frozen=True, slots=True, kw_only=True)
class DefectModel:
    """One defect at a stated place, or ``count`` of them at random places.

    ``kind`` says what is wrong, ``height`` and ``width`` how far it reaches: 1 x 1 is a pixel,
    height 0 a column from ``row`` to the side of its output that is read last, width 0 a row
    likewise. Random places keep a pixel's distance from each other.
    """

    kind: str = choice("What is wrong", *DEFECT_KINDS)
    count: int = number("How many at random places", default=1, minimum=1)
    chance: float = quantity(
        "%", "Share of devices that have it", default=100.0, minimum=0.0, maximum=100.0
    )
    row: int | None = number(
        "First row, 0-based, of the assembled image; omit for random places",
        default=None,
        minimum=0,
    )
    column: int | None = number("First column, likewise", default=None, minimum=0)
    height: int = number("Rows covered; 0: from the first to those read last", default=1, minimum=0)
    width: int = number(
        "Columns covered; 0: from the first to those read last", default=1, minimum=0
    )
    current: float = quantity(
        "electron / s",
        "hot, warm: dark current above the rest, at the dark signal's reference temperature;"
        " telegraph: the step, if it is one of dark current",
        default=0.0,
    )
    response: float | None = quantity(
        "%",
        "dim, bright, gain: response over that of the rest; dead: 0 when omitted",
        default=None,
        minimum=0.0,
    )
    noise: float = quantity(
        "electron", "noisy: read noise added in quadrature", default=0.0, minimum=0.0
    )
    amplitude: float = quantity(
        "electron", "telegraph: the step, if it is one of the output", default=0.0
    )
    dwell_low: float = quantity(
        "s", "telegraph: mean time in the low state", default=60.0, minimum=1e-6
    )
    dwell_high: float = quantity(
        "s", "telegraph: mean time in the high state", default=60.0, minimum=1e-6
    )
    code: float = quantity("DN", "stuck: the code it returns", default=0.0, minimum=0.0)
    curvature: float = quantity(
        "%", "nonlinear: signal lost at full well, in proportion to signal", default=0.0
    )
    capacity: float = quantity(
        "electron",
        "trap: charge that every packet loses on its way through the first row, or all of it if"
        " it holds less; give height 0 for the rows that pass it",
        default=0.0,
        minimum=0.0,
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class TrapModel:
    """Charge traps of one kind, each holding one electron at a time, at random places.

    Pumping carries a trap's electrons into the neighbouring row. ``toward`` says on which side:
    that of the register, the other, or either at random.
    """

    count: int = number("How many", default=1, minimum=1)
    row: int | None = number("0-based row of the assembled image; else random", default=None)
    column: int | None = number("Its column, likewise", default=None)
    energy: float = quantity("eV", "Below the conduction band", minimum=0.01, maximum=0.6)
    cross_section: float = quantity("cm2", "For the capture of electrons", minimum=1e-20)
    capture: float = number(
        "Probability of capture in one cycle of pumping", default=1.0, minimum=0.0, maximum=1.0
    )
    toward: str = choice("Side of pumping", "register", "away", "either", default="either")


@dataclass(frozen=True, slots=True, kw_only=True)
class SensorModel:
    """A sensor with known truth.

    ``sensor`` has the form of a recipe's, so that its sections and corners mean the same. An
    overscan section is read in its output's own direction, after the image section.
    """

    sensor: Sensor = entry("Technology, pitch, outputs and colour, as in a recipe")
    rows: int = number("Rows of the raw frame", minimum=1)
    columns: int = number("Columns of the raw frame", minimum=1)
    amplifier: Amplifier = entry("Every output that is not named", default_factory=Amplifier)
    amplifiers: dict[str, Amplifier] = entry("Outputs that differ, by name", default_factory=dict)
    full_well: float = quantity("electron", "Charge a pixel holds", default=1e5, minimum=1.0)
    full_well_spread: float = quantity(
        "%", "Standard deviation of the full well", default=0.0, minimum=0.0, maximum=20.0
    )
    charge_cloud: float = quantity(
        "um",
        "Standard deviation of an X-ray's charge when it is collected; it may reach neighbours",
        default=0.0,
        minimum=0.0,
    )
    variance_curvature: float = quantity(
        "1 / electron",
        "Change of variance over signal with signal, as charge repels charge; about -2e-6",
        default=0.0,
        minimum=-1e-5,
        maximum=0.0,
    )
    response: Response = entry("Response to light", default_factory=Response)
    dark: DarkSignal = entry("Dark current", default_factory=DarkSignal)
    offsets: Offsets = entry("Frames without charge", default_factory=Offsets)
    events: Events = entry("Particle events", default_factory=Events)
    cti_parallel: float = number(
        "Fraction of charge left behind by each parallel transfer", default=0.0, minimum=0.0
    )
    cti_serial: float = number(
        "Fraction of charge left behind by each serial transfer", default=0.0, minimum=0.0
    )
    traps: tuple[TrapModel, ...] = entry("Charge traps that pumping shows", default=())
    defects: tuple[DefectModel, ...] = entry("What is wrong and where", default=())
