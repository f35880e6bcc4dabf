"""Standard uncertainty that a set of frames will give, before a frame is taken.

Each formula is that of the measuring stage of the same name, with expected values in place of
measured ones. Symbols: g gain [electron/DN], r read noise and f offset scatter from frame to frame
[electron], D dark current [electron/s], t dark exposure [s], N pixels of an output; B bias frames,
L darks, F flats of the master at signal S [electron], P pairs at each of m light levels.
"""

from collections.abc import Callable
from dataclasses import dataclass
from math import hypot, inf, pi, sqrt

import numpy as np

from sensorgrade.options import number, quantity

ROUNDING_VARIANCE = 1.0 / 12.0  # DN², whole-DN steps
FIT_RANGE = 0.7  # of saturation: the brightest flats that photon transfer uses
LEVELS_FOR_CURVATURE = 5  # from here on the transfer is fitted with a quadratic term
HOT = "hot_pixels"


@dataclass(frozen=True, slots=True, kw_only=True)
class FrameSet:
    """How many frames of each kind; a pair is two flats."""

    bias: int
    darks: int
    dark_exposure: float  # s
    pairs: int
    levels: int
    flats: int

    @property
    def frames(self) -> int:
        """All frames of the set."""
        return self.bias + self.darks + 2 * self.pairs * self.levels + self.flats


@dataclass(frozen=True, slots=True, kw_only=True)
class ExpectedDevice:
    """What the device and the bench are expected to be like; one output."""

    pixels: int = number("Pixels of one output", default=1_000_000, minimum=2)
    conversion_gain: float = quantity("electron/DN", "Conversion gain", default=2.0, minimum=1e-6)
    read_noise: float = quantity("electron", "Read noise", default=5.0, minimum=1e-3)
    offset_scatter: float = quantity(
        "electron", "How the mean level scatters from frame to frame", default=0.2, minimum=0.0
    )
    saturation: float = quantity("electron", "Charge at saturation", default=50_000.0, minimum=1.0)
    dark_current: float = quantity("electron/s", "Mean dark current", default=1.0, minimum=0.0)
    dsnu: float = quantity("electron", "Dark non-uniformity of a dark", default=3.0, minimum=0.0)
    prnu: float = quantity("%", "Non-uniformity of the response", default=1.0, minimum=0.0)
    lamp_noise: float = quantity(
        "%", "How the light scatters from frame to frame", default=0.3, minimum=0.0
    )
    hot_threshold: float = quantity(
        "electron/s", "Dark current past which a pixel is hot", default=5.0, minimum=0.0
    )
    hot_scale: float = quantity(
        "electron/s",
        "Dark current over which the number of hot pixels falls by a factor e, at the threshold",
        default=2.0,
        minimum=1e-6,
    )
    flat_signal: float = quantity(
        "%", "Signal of the flats for the master, of saturation", default=50.0, minimum=1.0
    )


def conversion_gain_uncertainty(device: ExpectedDevice, taken: FrameSet) -> float:
    """[electron/DN]. Weighted least squares of the variances V(s) of pairs over the levels.

    A pair's variance has N degrees of freedom and scatters by 2 V² / N; bias pairs are points at
    no signal; a quadratic term is fitted from 5 levels on. u(g) = g² u(K) with K the slope.
    """
    order = 2 if taken.levels >= LEVELS_FOR_CURVATURE else 1
    if taken.pairs == 0 or taken.levels + (taken.bias > 1) < order + 1:
        return inf
    gain = device.conversion_gain
    read = (device.read_noise / gain) ** 2 + ROUNDING_VARIANCE
    top = FIT_RANGE * device.saturation / gain
    signal = top * np.arange(1, taken.levels + 1) / taken.levels
    variance = read + signal / gain
    degrees = np.full(taken.levels, float(taken.pairs * device.pixels))
    if taken.bias > 1:
        signal = np.append(0.0, signal)
        variance = np.append(read, variance)
        degrees = np.append(float(taken.bias // 2 * device.pixels), degrees)
    basis = np.stack([(signal / top) ** power for power in range(order + 1)])
    normal = (basis * degrees / (2.0 * variance**2)) @ basis.T
    return gain**2 * sqrt(float(np.linalg.inv(normal)[1, 1])) / top


def read_noise_uncertainty(device: ExpectedDevice, taken: FrameSet) -> float:
    """[electron]. Relative 1 / sqrt(2 N B/2) of the variance's root, and that of the gain."""
    if taken.bias < 2:
        return inf
    variance = (device.read_noise / device.conversion_gain) ** 2 + ROUNDING_VARIANCE
    scatter = variance * sqrt(2.0 / (device.pixels * (taken.bias // 2)))
    noise = device.read_noise / device.conversion_gain
    own = scatter / (2.0 * noise) * device.conversion_gain
    gain = conversion_gain_uncertainty(device, taken) / device.conversion_gain
    return hypot(own, device.read_noise * gain)


def dark_current_uncertainty(device: ExpectedDevice, taken: FrameSet) -> float:
    """[electron/s]. f sqrt(1/B + 1/L) / t, with f the scatter of levels, and that of the gain.

    Pixel noise over N pixels adds (r² + D t / 2) / N to f².
    """
    if taken.darks == 0 or taken.bias == 0 or taken.dark_exposure <= 0.0:
        return inf
    charge = device.dark_current * taken.dark_exposure
    level = sqrt(device.offset_scatter**2 + (device.read_noise**2 + charge / 2) / device.pixels)
    own = level * sqrt(1.0 / taken.bias + 1.0 / taken.darks) / taken.dark_exposure
    gain = conversion_gain_uncertainty(device, taken) / device.conversion_gain
    return hypot(own, device.dark_current * gain)


def dsnu_uncertainty(device: ExpectedDevice, taken: FrameSet) -> float:
    """[electron]. Spatial variance of the mean dark, the temporal variance over L subtracted."""
    if taken.darks < 2:
        return inf
    temporal = device.read_noise**2 + device.dark_current * taken.dark_exposure
    own = _spatial(device.dsnu**2, temporal, taken.darks, device.pixels)
    gain = conversion_gain_uncertainty(device, taken) / device.conversion_gain
    return hypot(own, device.dsnu * gain)


def prnu_uncertainty(device: ExpectedDevice, taken: FrameSet) -> float:
    """[%]. Spatial variance of the mean flat over its signal; the gain drops out."""
    if taken.flats < 2:
        return inf
    signal = device.flat_signal / 100.0 * device.saturation
    temporal = device.read_noise**2 + signal
    spatial = (device.prnu / 100.0 * signal) ** 2
    return 100.0 * _spatial(spatial, temporal, taken.flats, device.pixels) / signal


def saturation_capacity_uncertainty(device: ExpectedDevice, taken: FrameSet) -> float:
    """[electron]. The peak of the variance lies between two levels: spacing / sqrt(12); gain."""
    if taken.levels < 3:
        return inf
    spacing = device.saturation / taken.levels
    gain = conversion_gain_uncertainty(device, taken) / device.conversion_gain
    return hypot(spacing / sqrt(12.0), device.saturation * gain)


def linearity_error_uncertainty(device: ExpectedDevice, taken: FrameSet) -> float:
    """[%]. l / sqrt(2 P m): the lamp's flicker over the 2P frames of each of m levels.

    The mean of m absolute departures; the line takes two degrees of freedom, but a bent response
    puts the signs of the departures almost wholly into the others, so this is nearly reached.
    """
    if taken.levels < LEVELS_FOR_CURVATURE or taken.pairs == 0:
        return inf
    return device.lamp_noise / sqrt(2.0 * taken.pairs * taken.levels)


def hot_pixels_uncertainty(device: ExpectedDevice, taken: FrameSet, *, expected: float) -> float:
    """Of a count of ``expected`` pixels past the threshold T.

    A pixel's dark current has u = sqrt(r² (1/B + 1/L) + T t / L) / t. Pixels near the threshold
    have density expected / hot_scale; with chances p = Phi(z), the sum of p (1 - p) over them is
    that density times u / sqrt(pi). The gain moves them all together, by T u(g) / g.
    """
    if taken.darks == 0 or taken.bias == 0 or taken.dark_exposure <= 0.0:
        return inf
    time = taken.dark_exposure
    read = device.read_noise**2 * (1.0 / taken.bias + 1.0 / taken.darks)
    doubt = sqrt(read + device.hot_threshold * time / taken.darks) / time
    density = expected / device.hot_scale
    gain = conversion_gain_uncertainty(device, taken) / device.conversion_gain
    return hypot(sqrt(density * doubt / sqrt(pi)), density * device.hot_threshold * gain)


# The value of a limit that the device is expected to lie near takes the place of the device's own.
FORMULAS: dict[str, Callable[[ExpectedDevice, FrameSet], float]] = {
    "conversion_gain": conversion_gain_uncertainty,
    "read_noise": read_noise_uncertainty,
    "dark_current": dark_current_uncertainty,
    "dsnu": dsnu_uncertainty,
    "prnu": prnu_uncertainty,
    "saturation_capacity": saturation_capacity_uncertainty,
    "linearity_error": linearity_error_uncertainty,
}
# The field of ExpectedDevice that a limit's own value replaces.
FIELDS = {
    "conversion_gain": "conversion_gain",
    "read_noise": "read_noise",
    "dark_current": "dark_current",
    "dsnu": "dsnu",
    "prnu": "prnu",
    "saturation_capacity": "saturation",
}


def _spatial(spatial: float, temporal: float, frames: int, pixels: int) -> float:
    """Standard error of the root of a spatial variance found from the mean of ``frames``.

    Variance of the estimate: 2/N (s² + t/L)² + 2 (t/L)² / (N (L - 1)).
    """
    rest = temporal / frames
    variance = 2.0 / pixels * ((spatial + rest) ** 2 + rest**2 / (frames - 1))
    return sqrt(variance) / (2.0 * sqrt(spatial)) if spatial > 0.0 else inf
