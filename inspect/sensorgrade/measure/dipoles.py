"""Dipoles in pumped frames: a pixel that gained what its neighbour along the column lost."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sensorgrade.measure.emission_fit import pumped_share
from sensorgrade.measure.spatial_noise import MAD_TO_SD

Floats = NDArray[np.float64]
Image = NDArray[np.float32]
GRID = 48  # emission times tried
REACH = 3.0  # how far below the shortest and above the longest dwell time they go
ROWS = 128  # looked at in one go
LOPSIDED = 0.3  # of a dipole, by which gain and loss may differ beyond their noise
NOISE = 3.0  # deviations of noise in that difference


@dataclass(frozen=True, slots=True)
class Series:
    """Pumped frames of one output at one temperature, S dwell times.

    ``excess`` (S, M, N) float32 [electron] is the charge over that of a flat without pumping, the
    row read first at index 0. ``own`` (S,) and ``shared`` [electron²] are the variances of half
    the difference of two pixels: of each stack alone, and of the flat that all share.
    """

    kelvin: float
    times: Floats  # us
    cycles: Floats
    excess: Image
    own: Floats
    shared: float

    @property
    def precision(self) -> Floats:
        """Inverse covariance (S, S) of a dipole's amplitudes [1/electron²]."""
        return np.linalg.inv(np.diag(self.own) + self.shared).astype(np.float64)

    @property
    def grid(self) -> Floats:
        """Emission times tried [us]."""
        low, high = self.times.min() / REACH, self.times.max() * REACH
        grid: Floats = np.geomspace(low, high, GRID)
        return grid

    def amplitudes(self, rows: NDArray[np.intp], columns: NDArray[np.intp]) -> Floats:
        """Half the difference of pixel (row) and (row + 1), shape (K, S) [electron]."""
        first, second = self.excess[:, rows, columns], self.excess[:, rows + 1, columns]
        return (first - second).T.astype(np.float64) / 2


@dataclass(frozen=True, slots=True)
class Dipoles:
    """K dipoles of one output: pixels (``rows``, ``columns``) and the next row, reading order.

    ``significance`` (K,) in standard deviations, positive where the pixel read first gained.
    """

    rows: NDArray[np.intp]
    columns: NDArray[np.intp]
    significance: Floats


def filters(series: Series, window: float) -> tuple[Floats, Floats]:
    """Weights (T, S) that turn amplitudes into deviations for each emission time, and grid (T,).

    The filter matched to the law f(t) under covariance C is C⁻¹ f / sqrt(f C⁻¹ f): its answer has
    a standard deviation of 1 where there is no trap, and is as large as it can be where one is.
    """
    law = series.cycles * pumped_share(series.times / series.grid[:, None], window)
    weight = law @ series.precision
    return weight / np.sqrt((weight * law).sum(axis=1))[:, None], series.grid


def find_dipoles(series: list[Series], *, threshold: float, window: float) -> Dipoles:
    """Dipoles of one output seen at any of the temperatures.

    A dipole stands out by ``threshold`` deviations in the matched filter of some emission time,
    more than the pairs above and below it, and gains on one side what it loses on the other.
    """
    best: Image | None = None
    for one in series:
        weight, _ = filters(one, window)
        found = _largest(one.excess, weight.astype(np.float32))
        best = found if best is None else np.where(np.abs(found) > np.abs(best), found, best)
    assert best is not None
    size = np.abs(best)
    edge = np.zeros((1, size.shape[1]), np.float32)
    above = np.concatenate([edge, size[:-1]])
    below = np.concatenate([size[1:], edge])
    rows, columns = np.nonzero((size >= threshold) & (size >= above) & (size > below))
    kept = np.zeros(len(rows), dtype=bool)
    for one in series:
        kept |= _balanced(one, rows, columns, threshold, window)
    rows, columns = rows[kept], columns[kept]
    return Dipoles(rows, columns, best[rows, columns].astype(np.float64))


def _largest(excess: Image, weight: Image) -> Image:
    """The deviation of largest size over emission times, of every pair of rows (M - 1, N)."""
    stacks, rows, columns = excess.shape
    found = np.empty((rows - 1, columns), np.float32)
    for top in range(0, rows - 1, ROWS):
        part = excess[:, top : min(top + ROWS, rows - 1) + 1]
        half = ((part[:, :-1] - part[:, 1:]) / 2).reshape(stacks, -1)
        answer = weight @ half
        high, low = answer.max(axis=0), answer.min(axis=0)
        found[top : top + part.shape[1] - 1] = np.where(high > -low, high, low).reshape(-1, columns)
    return found


def _balanced(
    series: Series,
    rows: NDArray[np.intp],
    columns: NDArray[np.intp],
    threshold: float,
    window: float,
) -> NDArray[np.bool_]:
    """Which pairs stand out at this temperature and gain what they lose.

    A bright or dark pixel of its own kind has no partner: it is no dipole.
    """
    weight, _ = filters(series, window)
    answers = series.amplitudes(rows, columns) @ weight.T
    at = np.argmax(np.abs(answers), axis=1)
    stands = np.abs(answers[np.arange(len(rows)), at]) >= threshold
    chosen = weight[at]
    # In deviations of half a difference, so each pixel scatters by sqrt(2) and the sum by 2.
    first = (series.excess[:, rows, columns].T * chosen).sum(axis=1)
    second = (series.excess[:, rows + 1, columns].T * chosen).sum(axis=1)
    allowed = NOISE * 2 + LOPSIDED * np.abs(first - second)
    balanced: NDArray[np.bool_] = stands & (np.abs(first + second) <= allowed)
    return balanced


def robust_variance(half: Image | Floats) -> float:
    """Variance [electron²] of half differences, from their median size; traps are few."""
    sample = half[:: max(1, half.shape[0] // 1024)]
    return float((MAD_TO_SD * np.median(np.abs(sample - np.median(sample)))) ** 2)
