"""Charge that X-rays of an iron-55 source leave in a sensor."""

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtr

from sensorgrade.silicon import (
    K_ALPHA_1,
    K_ALPHA_1_RATE,
    K_ALPHA_2,
    K_ALPHA_2_RATE,
    K_BETA,
    K_BETA_RATE,
    ZERO_CELSIUS,
    fano_factor,
    pair_energy,
)

LINES = np.array([K_ALPHA_1.value, K_ALPHA_2.value, K_BETA.value])  # eV
RATES = np.array([K_ALPHA_1_RATE.value, K_ALPHA_2_RATE.value, K_BETA_RATE.value])


def x_ray_charge(
    shape: tuple[int, int],
    photons: int,
    *,
    temperature: float,
    cloud: float,
    rng: np.random.Generator,
) -> NDArray[np.float32]:
    """Charge [electron] of ``photons`` of manganese K lines at random places, shape (M, N).

    Parameters
    ----------
    temperature : float [degC]
        Sets the energy for one electron-hole pair and the Fano factor.
    cloud : float [pixel]
        Standard deviation of the charge cloud. Each electron falls into one of the 3 x 3 pixels
        about the photon by the cloud's share there; 0 leaves all in one pixel.

    Notes
    -----
    Photons come in the lines' rates; charge is E / w with variance F E / w. No electron is lost
    but where the 3 x 3 pixels leave the image.
    """
    kelvin = temperature + ZERO_CELSIUS
    energy = rng.choice(LINES, size=photons, p=RATES / RATES.sum())
    mean = energy / pair_energy(kelvin)
    electrons = np.rint(mean + np.sqrt(fano_factor(kelvin) * mean) * rng.standard_normal(photons))
    rows, columns = (rng.uniform(0, size, photons) for size in shape)
    charge = np.zeros((shape[0] + 2, shape[1] + 2), np.float32)  # with a border of one pixel
    row, column = rows.astype(np.intp), columns.astype(np.intp)
    if cloud == 0:
        np.add.at(charge, (row + 1, column + 1), electrons.astype(np.float32))
        return charge[1:-1, 1:-1]
    down, across = _shares(rows - row, cloud), _shares(columns - column, cloud)
    shares = (down[:, :, None] * across[:, None, :]).reshape(photons, 9)
    parts = rng.multinomial(electrons.astype(np.int64), shares / shares.sum(axis=1, keepdims=True))
    for at in range(9):
        step_row, step_column = divmod(at, 3)
        np.add.at(charge, (row + step_row, column + step_column), parts[:, at].astype(np.float32))
    return charge[1:-1, 1:-1]


def _shares(place: NDArray[np.float64], cloud: float) -> NDArray[np.float64]:
    """Shares (E, 3) of a Gaussian cloud at ``place`` in a pixel, of it and both neighbours."""
    edges = np.array([-1.0, 0.0, 1.0, 2.0])
    shares: NDArray[np.float64] = np.diff(ndtr((edges - place[:, None]) / cloud), axis=1)
    return shares
