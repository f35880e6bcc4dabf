"""Signal and temporal variance of frame pairs, tile by tile, free of lamp drift and pattern."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sensorgrade.errors import NotMeasured
from sensorgrade.frames.frame import Stack
from sensorgrade.frames.geometry import Region
from sensorgrade.masters.reduced import PairTiles, tile_shape
from sensorgrade.measure.stage import Inputs

SMALLEST_TILE = 16  # pixels; a smaller tile's variance says nothing
SHARP_RATIO = 0.02  # a tile's own light ratio is used when its standard error is below this
STEADY = 0.02  # neighbour covariances are kept of pairs whose light changed less than this


@dataclass(frozen=True, slots=True)
class PairPoints:
    """What the pairs of one stack say in one region; arrays are flat over pairs and tiles.

    signal [DN]: light of one frame, bias subtracted; variance [DN²]: temporal variance of one
    sample at that signal; ``degrees`` of freedom of the variance; ``right``, ``down`` [DN²]:
    temporal covariance with the right and lower neighbour, NaN where the light was not steady;
    ``saturated``: share of samples at the converter's end; ``pair``: index of the pair.
    """

    stack: Stack
    signal: NDArray[np.float64]
    variance: NDArray[np.float64]
    degrees: NDArray[np.float64]
    right: NDArray[np.float64]
    down: NDArray[np.float64]
    saturated: NDArray[np.float64]
    pair: NDArray[np.int64]


def tile_means(image: NDArray[np.float32]) -> NDArray[np.float64]:
    """Means of (M, N) over its tiles, from every fourth row: (Ty, Tx) float64.

    Rows are thinned because the pattern inside a tile averages out long before all are read.
    """
    rows, columns = tile_shape(*image.shape)
    thin = image[::4] if image.shape[0] >= rows else image
    row_starts = np.arange(0, thin.shape[0], rows // 4 if image.shape[0] >= rows else rows)
    column_starts = np.arange(0, thin.shape[1], columns)
    sums = np.add.reduceat(thin, column_starts, axis=1)
    sums = np.add.reduceat(sums, row_starts, axis=0, dtype=np.float64)
    heights = np.diff(np.append(row_starts, thin.shape[0]))
    widths = np.diff(np.append(column_starts, thin.shape[1]))
    means: NDArray[np.float64] = sums / np.outer(heights, widths)
    return means


def tile_bias(inputs: Inputs, region: Region) -> NDArray[np.float64]:
    """Bias level of each tile of a region, (Ty, Tx) or (1, 1) [DN].

    From the master bias; without one, zero for an output with overscan.

    Raises
    ------
    NotMeasured
        There is neither a master bias nor an overscan.
    """
    if inputs.masters.bias is not None:
        return tile_means(inputs.masters.bias.values[region.rows, region.columns])
    output = next(o for o in inputs.reduced.geometry.outputs if o.name == region.output)
    if output.overscan is None:
        raise NotMeasured("needs bias frames or an overscan, to know the level without light")
    return np.zeros((1, 1))


def pair_points(pairs: PairTiles, bias: NDArray[np.float64]) -> PairPoints:
    """Signal and temporal variance of each tile of each pair.

    Parameters
    ----------
    pairs : PairTiles
        Arrays of shape (P, Ty, Tx).
    bias : ndarray of shape (Ty, Tx) or (1, 1) [DN]

    Notes
    -----
    With light a in A and b in B above bias, and r = a / b, the difference A - rB holds neither
    the lamp's drift nor the fixed response pattern, and
    var(A - rB) = V(a) + r² V(b), which for V(s) = R + K s + c s² is
    (1 + r²) V(s) at s = a (1 + r) / (1 + r²), up to (1 - r)² in the term of c.
    A bias pair has no light: r = 1. For r = 1 this is the two-frame estimator of EMVA 1288.
    """
    a, b = pairs.mean_a - bias, pairs.mean_b - bias
    usable = pairs.count >= SMALLEST_TILE
    if pairs.stack.kind == "bias":
        ratio = np.ones_like(a)
    else:
        total = np.where(usable, pairs.count, 0.0)
        light_a, light_b = (a * total).sum(axis=(1, 2)), (b * total).sum(axis=(1, 2))
        # An output that is dead or dark has no light to take a ratio of.
        lit = (light_a > 0) & (light_b > 0)
        whole = np.where(lit, light_a, 1.0) / np.where(lit, light_b, 1.0)
        ratio = np.broadcast_to(whole[:, None, None], a.shape).copy()
        with np.errstate(divide="ignore", invalid="ignore"):
            error = np.sqrt(2 * pairs.var_b / pairs.count) / b
            sharp = usable & (b > 0) & (error < SHARP_RATIO)
            ratio[sharp] = (a / b)[sharp]
    scale = 1 + ratio**2
    variance = (pairs.var_a + ratio**2 * pairs.var_b - 2 * ratio * pairs.cov_ab) / scale
    steady = np.abs(ratio - 1) < STEADY
    index = np.broadcast_to(np.arange(len(a))[:, None, None], a.shape)
    return PairPoints(
        stack=pairs.stack,
        signal=(a * (1 + ratio) / scale)[usable],
        variance=variance[usable],
        degrees=(pairs.count - 1)[usable],
        right=np.where(steady, pairs.cov_right / scale, np.nan)[usable],
        down=np.where(steady, pairs.cov_down / scale, np.nan)[usable],
        saturated=(pairs.saturated / (2 * pairs.count))[usable],
        pair=index[usable],
    )


def points_of(inputs: Inputs, region: Region, *, kind: str) -> tuple[PairPoints, ...]:
    """Points of every stack of that kind ("bias" or "flat") in the region, dimmest first.

    Raises
    ------
    NotMeasured
        Flats were asked for, and the bias level is unknown or none of them shows light.
    """
    found = [
        pairs
        for pairs in inputs.reduced.pairs
        if pairs.stack.kind == kind and pairs.region.scope == region.scope
    ]
    if not found:
        return ()
    bias = tile_bias(inputs, region) if kind == "flat" else np.zeros((1, 1))
    points = [pair_points(pairs, bias) for pairs in found]
    if kind == "flat" and max(float(p.signal.max(initial=0.0)) for p in points) <= 0:
        raise NotMeasured("no flat shows light above the bias level here")
    return tuple(sorted(points, key=lambda p: float(p.signal.mean()) if p.signal.size else 0.0))
