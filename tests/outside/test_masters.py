"""Master frames as general libraries see them: astropy's CCDData and an independent FITS reader."""

import numpy as np
import pytest
from astropy import units
from astropy.io import fits
from astropy.nddata import CCDData, StdDevUncertainty
from fitsio import FITS

from sensorgrade.frames.frame import Stack
from sensorgrade.masters.files import checksum_text, write_master
from sensorgrade.masters.master import Master


def master(kind="bias", unit="DN", shape=(37, 41), seed=0):
    rng = np.random.default_rng(seed)
    count = rng.integers(0, 3, shape).astype(np.uint16)
    values, uncertainty = rng.normal(500, 5, (2, *shape)).astype(np.float32)
    stack = Stack(kind=kind, frames=(), exposure=12.5, temperature=-20.0)
    return Master(kind, values, uncertainty, count, unit, stack)


@pytest.mark.parametrize(("kind", "unit"), [("bias", units.adu), ("flat", units.one)])
def test_ccddata_opens_a_master_with_no_arguments(tmp_path, outside, kind, unit):
    made = master(kind, "DN" if kind == "bias" else "")
    write_master(tmp_path / "m.fits", made, serial="W1-Ω\n07")
    read = CCDData.read(tmp_path / "m.fits")
    assert read.unit == unit
    assert isinstance(read.uncertainty, StdDevUncertainty)
    source = {"source": "astropy.nddata.CCDData.read", "standing": "library"}
    outside(f"master {kind}: values", expected=made.values, found=read.data, **source)
    outside(
        f"master {kind}: standard uncertainty",
        expected=made.uncertainty,
        found=read.uncertainty.array,
        **source,
    )
    outside(f"master {kind}: mask", expected=made.count == 0, found=read.mask * 1, **source)


def test_both_libraries_verify_the_sums(tmp_path, outside):
    for seed, shape in enumerate([(1, 1), (37, 41), (120, 96)]):
        path = tmp_path / f"m{seed}.fits"
        write_master(path, master(shape=shape, seed=seed), serial="A")
        with fits.open(path, checksum=True) as hdus:  # a wrong sum warns, and warnings are errors
            assert [hdu.name for hdu in hdus] == ["PRIMARY", "MASK", "UNCERT"]
        with FITS(str(path)) as units_of_file:
            for unit in units_of_file:
                unit.verify_checksum()  # raises when either sum is wrong
    start = 0
    content = path.read_bytes()
    with fits.open(path) as hdus:
        for hdu in hdus:
            end = hdu.fileinfo()["datLoc"] + hdu.fileinfo()["datSpan"]
            total = int(np.frombuffer(content[start:end], ">u4").sum(dtype=np.uint64))
            while total >> 32:
                total = (total & 0xFFFFFFFF) + (total >> 32)
            outside(
                f"ones' complement sum of unit {hdu.name}",
                source="FITS 4.0, appendix J: a whole unit sums to all ones",
                standing="confirmed",
                expected=0xFFFFFFFF,
                found=total,
            )
            start = end


def test_one_flipped_byte_is_noticed(tmp_path):
    path = tmp_path / "m.fits"
    write_master(path, master(), serial="A")
    content = bytearray(path.read_bytes())
    content[3000] ^= 1
    path.write_bytes(content)
    with pytest.warns(match="verification failed"), fits.open(path, checksum=True) as hdus:
        assert hdus[0].data is not None


def test_checksum_text_is_what_astropy_encodes(outside):
    values = [0, 1, 0xFFFFFFFF, 0x0F0F0F0F, 868229149, 2_503_531_142]
    unit = fits.PrimaryHDU()
    for value in values:
        assert checksum_text(value) == unit._char_encode(value)
    outside(
        "characters of an encoded sum",
        source="FITS 4.0, appendix J.2, as astropy.io.fits encodes it",
        standing="library",
        expected=[ord(c) for c in unit._char_encode(values[-1])],
        found=[ord(c) for c in checksum_text(values[-1])],
    )


def test_a_master_is_the_same_to_the_byte_whenever_it_is_written(tmp_path):
    for name in ("a.fits", "b.fits"):
        write_master(tmp_path / name, master(), serial="A")
    assert (tmp_path / "a.fits").read_bytes() == (tmp_path / "b.fits").read_bytes()
