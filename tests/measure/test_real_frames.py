"""The cooled CCD of SENSORGRADE_REAL_FRAMES: what was found by hand is found again."""

import os
from pathlib import Path

import numpy as np
import pytest
from astropy.io import fits

from measure.plain_reduction import knowing, plain_inputs, stack_of
from sensorgrade.errors import NotMeasured
from sensorgrade.measure.dark_current import DarkCurrentOptions, dark_current
from sensorgrade.measure.photon_transfer import PhotonTransferOptions, photon_transfer
from sensorgrade.measure.read_noise import ReadNoiseOptions, read_noise
from sensorgrade.measure.saturation import SaturationOptions, saturation
from sensorgrade.measure.stage import Inputs

FOLDER = os.environ.get("SENSORGRADE_REAL_FRAMES")
pytestmark = pytest.mark.skipif(FOLDER is None, reason="SENSORGRADE_REAL_FRAMES is not set")


@pytest.fixture(scope="module")
def inputs() -> Inputs:
    assert FOLDER is not None

    def read(*numbers: str) -> np.ndarray:
        paths = [next(Path(FOLDER).rglob(f"*_{number}.fits")) for number in numbers]
        return np.stack([fits.getdata(path).astype(np.float64) for path in paths])

    bias = read("0220", "0221", "0222", "0223", "0226")
    blue = read("0243", "0244", "0246", "0247")
    green = read("0251", "0252")
    return plain_inputs(
        [
            (stack_of("bias", 5, exposure=0.0), bias),
            (stack_of("flat", 4, exposure=20.0, wavelength="Blue"), blue),
            (stack_of("flat", 2, exposure=20.0, wavelength="Green"), green),
        ]
    )


def test_fading_light_still_gives_the_gain(inputs):
    # The light fades 8 to 12 % between the frames of a pair; 2.29 to 2.35 was found by ratio.
    transfer = photon_transfer(inputs, PhotonTransferOptions())
    gain = next(m for m in transfer.measurements if m.name == "conversion_gain")
    assert 2.29 < gain.value < 2.35
    noise = read_noise(knowing(inputs, gain), ReadNoiseOptions())
    found = {m.name: m.value for m in noise.measurements}
    assert found["read_noise_dn"] == pytest.approx(6.39, abs=0.05)


def test_what_is_missing_is_said(inputs):
    with pytest.raises(NotMeasured, match="needs dark frames"):
        dark_current(inputs, DarkCurrentOptions())
    transfer = photon_transfer(inputs, PhotonTransferOptions())
    with pytest.raises(NotMeasured, match="still rises at the brightest flat"):
        saturation(knowing(inputs, *transfer.measurements), SaturationOptions())
