"""Crosstalk between outputs: ghosts of one output's bright pixels in the others."""

from dataclasses import dataclass
from math import sqrt

import numpy as np
from numpy.typing import NDArray

from sensorgrade.errors import NotMeasured
from sensorgrade.frames.geometry import Output
from sensorgrade.measure.spatial_noise import MAD_TO_SD
from sensorgrade.measure.stage import Inputs, Quantity, Stage
from sensorgrade.measurement import Finding, Measurement
from sensorgrade.options import number

REJECT = 5.0  # deviations past which the victim's own pixel is a defect and says nothing
RESOLVED = 3.0

QUANTITIES = (
    Quantity(
        "crosstalk",
        "%",
        "Signal that appears in an output, as a share of a bright pixel read at the same moment by"
        " another: the largest over the others, without its sign",
    ),
)


@dataclass(frozen=True, slots=True, kw_only=True)
class CrosstalkOptions:
    """Recipe keys under ``stages: crosstalk``."""

    bright: float = number(
        "Least level of a bright pixel over its output's noise, in standard deviations",
        default=50.0,
        minimum=10.0,
    )


@dataclass(frozen=True, slots=True)
class CrosstalkResult:
    """``share`` (Q, Q): from the output of the row into that of the column; 0 on the diagonal.

    ``error`` alike; infinite where an output has no bright pixel.
    """

    outputs: tuple[str, ...]
    share: NDArray[np.float64]
    error: NDArray[np.float64]
    measurements: tuple[Measurement, ...]
    findings: tuple[Finding, ...]


def crosstalk(inputs: Inputs, options: CrosstalkOptions) -> CrosstalkResult:
    """Crosstalk [%] into every output, from the hot pixels of the longest darks.

    Raises
    ------
    NotMeasured
        There is one output, no dark, outputs of different shapes, or no bright pixel.

    Notes
    -----
    Outputs are laid over each other in the order in which they are read. With a the excess of a
    bright pixel and b that of the pixel read at the same moment, the share is sum(ab)/sum(a²),
    its uncertainty the noise of b over sqrt(sum(a²)). Light that reaches both looks the same, so
    only darks are used.
    """
    outputs = inputs.reduced.geometry.outputs
    if len(outputs) < 2:
        raise NotMeasured("needs two or more outputs; this sensor has one")
    if not inputs.reduced.darks:
        raise NotMeasured("needs dark frames, whose hot pixels leave ghosts in the other outputs")
    if len({output.place.shape for output in outputs}) > 1:
        raise NotMeasured("needs outputs of the same shape, to know what is read at one moment")
    dark = max(inputs.reduced.darks, key=lambda image: image.stack.exposure or 0.0)
    image = dark.mean.astype(np.float32)
    if inputs.reduced.bias is not None:
        image = image - inputs.reduced.bias.mean
    read = [_excess(in_reading_order(image, output)) for output in outputs]
    size = len(outputs)
    share, error = np.zeros((size, size)), np.full((size, size), np.inf)
    for i, (source, noise) in enumerate(read):
        bright = source > options.bright * noise
        if not bright.any():
            continue
        for j, (victim, victim_noise) in enumerate(read):
            if i == j:
                continue
            a, b = source[bright].astype(np.float64), victim[bright].astype(np.float64)
            share[i, j], error[i, j] = _regression(a, b, victim_noise)
    if not np.isfinite(error).any():
        raise NotMeasured("no pixel of the darks is bright enough to leave a ghost")
    measurements, findings = _measurements(outputs, share, error)
    return CrosstalkResult(
        tuple(output.name for output in outputs), share, error, measurements, findings
    )


def in_reading_order(image: NDArray[np.float32], output: Output) -> NDArray[np.float32]:
    """The output's part of the assembled image with the pixel read first at row 0, column 0."""
    part = image[output.place.slices]
    if "top" in output.corner:
        part = part[::-1]
    if "right" in output.corner:
        part = part[:, ::-1]
    return part


def _excess(part: NDArray[np.float32]) -> tuple[NDArray[np.float32], float]:
    """A part less its median, and its robust noise [DN]."""
    sample = part[:: max(1, part.shape[0] // 512), :: max(1, part.shape[1] // 512)]
    middle = float(np.median(sample))
    noise = MAD_TO_SD * float(np.median(np.abs(sample - middle)))
    return part - np.float32(middle), noise or float(sample.std()) or 1.0


def _regression(
    a: NDArray[np.float64], b: NDArray[np.float64], noise: float
) -> tuple[float, float]:
    """Share and error of b in a; pixels that lie off on their own are left out in turn."""
    kept = np.ones(len(a), dtype=bool)
    share = float(np.median(b / a))
    for _ in range(3):
        kept = np.abs(b - share * a) <= REJECT * noise
        if not kept.any():
            return 0.0, np.inf
        share = float(a[kept] @ b[kept] / (a[kept] @ a[kept]))
    return share, noise / sqrt(float(a[kept] @ a[kept]))


def _measurements(
    outputs: tuple[Output, ...], share: NDArray[np.float64], error: NDArray[np.float64]
) -> tuple[tuple[Measurement, ...], tuple[Finding, ...]]:
    measurements, findings = [], []
    for j, output in enumerate(outputs):
        known = np.isfinite(error[:, j])
        if not known.any():
            continue
        found = np.where(known, np.abs(share[:, j]) / error[:, j], 0.0)
        i = int(np.argmax(found))
        scope = f"output {output.name}"
        if found[i] > RESOLVED:
            i = int(np.argmax(np.where(found > RESOLVED, np.abs(share[:, j]), 0.0)))
            measurements.append(
                Measurement(
                    "crosstalk",
                    scope,
                    100 * float(abs(share[i, j])),
                    100 * float(error[i, j]),
                    "%",
                    int(known.sum()),
                )
            )
        else:
            limit = 100 * float((np.abs(share[:, j]) + 2 * error[:, j])[known].max())
            findings.append(
                Finding(
                    severity="note",
                    where=f"crosstalk, {scope}",
                    seen=f"no ghost is resolved; crosstalk is below {limit:.2g} %",
                    remedy="longer darks have brighter pixels and would tell",
                    undecides=("crosstalk",),
                )
            )
    return tuple(measurements), tuple(findings)


STAGE = Stage("crosstalk", CrosstalkOptions, crosstalk, QUANTITIES)
