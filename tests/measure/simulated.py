"""Frames of a plain simulated sensor with known truth, for the stages' tests."""

import numpy as np


def exposures(
    rng: np.random.Generator,
    light: np.ndarray,
    *,
    frames: int,
    gain: float = 2.0,
    read_noise: float = 8.0,
    bias: np.ndarray | float = 500.0,
    full_well: float = np.inf,
    last_code: float = 65535.0,
    curvature: float = 0.0,
) -> np.ndarray:
    """(L, M, N) DN of frames with mean charge ``light`` (M, N) [electron].

    Charge is Poisson (Gaussian above 1000), its variance lowered by curvature · charge², held at
    ``full_well``; then read noise [electron], division by ``gain`` [electron/DN], rounding.
    """
    light = np.broadcast_to(light, (frames, *np.shape(light)))
    spread = np.sqrt(np.maximum(light + curvature * light**2, 0.0))
    charge = light + spread * rng.standard_normal(light.shape)
    if light.size and light.max() < 1000 and curvature == 0.0:
        charge = rng.poisson(light).astype(np.float64)
    charge = np.minimum(charge, full_well)
    charge += read_noise * rng.standard_normal(light.shape)
    return np.clip(np.rint(charge / gain + bias), 0, last_code)
