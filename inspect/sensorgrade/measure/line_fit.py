"""Place of an X-ray line among events, with a second line and a background beside it."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from sensorgrade.errors import NotMeasured

Floats = NDArray[np.float64]
WINDOW = (0.85, 1.20)  # of the line's place, within which events are fitted
ROUNDS = 200
SETTLED = 1e-10
MODE_SHARE = 0.3  # of the events, whose shortest interval gives the first guess
FEWEST = 100  # events in the window


@dataclass(frozen=True, slots=True)
class LineFit:
    """``parameters`` (p,) with ``covariance``; ``width`` the line's standard deviation.

    ``lines`` the shares of first line, second line and background; ``events`` in the window.
    """

    parameters: Floats
    covariance: Floats
    width: float
    lines: tuple[float, float, float]
    events: int


def line_fit(values: Floats, transfers: Floats, *, ratio: float, fit_ratio: bool) -> LineFit:
    """Fit the place of the line to ``values``, most likely under a mixture of three sources.

    Parameters
    ----------
    values : ndarray of shape (E,) [DN]
        Signals of the events.
    transfers : ndarray of shape (E, k)
        Transfers of each event in k directions; (E, 0) for none.
    ratio : float
        Place of the second line over the first's.
    fit_ratio : bool
        Whether that place is fitted as well, as the last parameter.

    Returns
    -------
    LineFit
        Parameters are the place without transfers [DN], a loss per transfer for each direction,
        then the ratio if fitted.

    Raises
    ------
    NotMeasured
        Fewer than 100 events lie about the line.

    Notes
    -----
    Model: an event is of the first line, normal about S = S0 exp(-sum loss_i n_i) with one width;
    or of the second, normal about ratio S with width * sqrt(ratio); or anything, uniform in the
    window of 0.85 to 1.20 S. Expectation and maximisation alternate. The covariance is the inverse
    of the sum of squared scores, the observed information.
    """
    directions = transfers.shape[1]
    parameters = np.array([_mode(values), *np.zeros(directions), *([ratio] if fit_ratio else [])])
    width = 0.05 * parameters[0]
    lines = np.array([0.8, 0.1, 0.1])
    for _ in range(ROUNDS):
        place, second, gradient, inside = _model(parameters, values, transfers, ratio, fit_ratio)
        if inside.sum() < FEWEST:
            raise NotMeasured(
                f"needs {FEWEST} or more single events about the line, it found {inside.sum()};"
                " take more X-ray frames"
            )
        y, place = values[inside], place[inside]
        density = np.stack(
            [
                _normal(y - place, width),
                _normal(y - second * place, width * np.sqrt(second)),
                1 / ((WINDOW[1] - WINDOW[0]) * place),
            ]
        )
        weighted = lines[:, None] * density
        share = weighted / weighted.sum(axis=0)
        first, other = gradient[0][inside], gradient[1][inside]
        a, b = share[0] / width**2, share[1] / (width**2 * second)
        normal = (first.T * a) @ first + (other.T * b) @ other
        force = first.T @ (a * (y - place)) + other.T @ (b * (y - second * place))
        step = np.linalg.solve(normal, force)
        squares = share[0] * (y - place) ** 2 + share[1] * (y - second * place) ** 2 / second
        width = float(np.sqrt(squares.sum() / share[:2].sum()))
        lines = share.mean(axis=1)
        parameters = parameters + step
        if np.all(np.abs(step) <= SETTLED * np.maximum(np.abs(parameters), 1e-6)):
            break
    score = first * (a * (y - place))[:, None] + other * (b * (y - second * place))[:, None]
    return LineFit(
        parameters=parameters,
        covariance=np.linalg.inv(score.T @ score),
        width=width,
        lines=(float(lines[0]), float(lines[1]), float(lines[2])),
        events=int(inside.sum()),
    )


def _model(
    parameters: Floats, values: Floats, transfers: Floats, ratio: float, fit_ratio: bool
) -> tuple[Floats, float, tuple[Floats, Floats], NDArray[np.bool_]]:
    """Places of the first line, the second's ratio, gradients of both, events in the window."""
    directions = transfers.shape[1]
    kept = np.exp(-transfers @ parameters[1 : 1 + directions])
    place = parameters[0] * kept
    second = float(parameters[-1]) if fit_ratio else ratio
    first = np.column_stack([kept, -place[:, None] * transfers])
    other = second * first
    if fit_ratio:
        first = np.column_stack([first, np.zeros(len(values))])
        other = np.column_stack([other, place])
    inside = (values > WINDOW[0] * place) & (values < WINDOW[1] * place)
    return place, second, (first, other), inside


def _normal(deviation: Floats, width: float) -> Floats:
    density: Floats = np.exp(-0.5 * (deviation / width) ** 2) / (width * np.sqrt(2 * np.pi))
    return density


def _mode(values: Floats) -> float:
    """Middle of the shortest interval that holds a share of the values."""
    if len(values) < FEWEST:
        raise NotMeasured(
            f"needs {FEWEST} or more single events, it found {len(values)}; take more"
            " X-ray frames, or raise 'split' where charge spreads over several pixels"
        )
    ordered = np.sort(values)
    count = int(MODE_SHARE * len(ordered))
    at = int(np.argmin(ordered[count:] - ordered[: len(ordered) - count]))
    return float(np.median(ordered[at : at + count + 1]))
