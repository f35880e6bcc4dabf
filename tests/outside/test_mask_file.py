"""Masks and defect tables as other libraries read them, and what they make of them."""

import numpy as np
import pytest
from astropy import units
from astropy.io import fits
from astropy.nddata import CCDData
from astropy.table import Table
from fitsio import FITS
from photutils.aperture import CircularAperture, aperture_photometry
from skimage.measure import label, regionprops
from skimage.restoration import inpaint_biharmonic

from sensorgrade.defects.bits import BITS, BY_NAME
from sensorgrade.defects.clusters import ClusterOptions, groups
from sensorgrade.defects.defect import DEFECT, Defects
from sensorgrade.defects.mask_file import read_mask, write_defect_table, write_mask
from sensorgrade.errors import RequestError


def some_defects(shape=(40, 52)):
    mask = np.zeros(shape, np.uint16)
    mask[3, 7] = BY_NAME["hot"].value
    mask[:, 20] = BY_NAME["column"].value
    mask[30:32, 40:43] = BY_NAME["dead"].value | BY_NAME["cluster"].value
    table = np.zeros(3, DEFECT)
    table["kind"] = ["cluster", "dead column", "hot"]
    table["row"], table["column"] = [30, 0, 3], [40, 20, 7]
    table["pixels"], table["value"] = [6, 40, 1], [0.5, 1.25, 77.5]
    table["unit"] = ["%", "%", "electron / s"]
    return Defects(table=table, mask=mask, counts=(), findings=())


@pytest.fixture
def written(tmp_path):
    made = some_defects()
    write_mask(tmp_path / "mask.fits", made, serial="A-1")
    write_defect_table(tmp_path / "defects.ecsv", made)
    return made, tmp_path


def test_an_independent_reader_sees_the_same_mask_and_table(written, outside):
    made, folder = written
    with FITS(str(folder / "mask.fits")) as units_of_file:
        for unit in units_of_file:
            unit.verify_checksum()
        found = units_of_file[0].read()
        table = units_of_file["DEFECTS"].read()
        header = units_of_file[0].read_header()
    source = {"source": "fitsio (CFITSIO)", "standing": "library"}
    outside("mask.fits: bits", expected=made.mask, found=found, **source)
    outside(
        "mask.fits: defect values", expected=made.table["value"], found=table["value"], **source
    )
    assert [kind.strip() for kind in table["kind"]] == made.table["kind"].tolist()
    # FITS positions count from 1, x along columns: pixel [3, 7] is x = 8, y = 4.
    assert (table["x"][2], table["y"][2]) == (8, 4)
    for bit in BITS:
        name = header[f"BIT{bit.value.bit_length() - 1:02d}"]
        assert name.strip() == bit.name


def test_astropy_reads_both_files_and_finds_the_sums_right(written):
    made, folder = written
    with fits.open(folder / "mask.fits", checksum=True) as hdus:
        assert hdus[0].data.dtype == np.uint16
    table = Table.read(folder / "defects.ecsv")
    assert table.colnames == list(DEFECT.names)
    assert table["value"].tolist() == made.table["value"].tolist()
    assert all(column.description for column in table.itercols())


def test_a_mask_reads_back_and_what_is_none_is_refused(written, tmp_path):
    made, folder = written
    bad, bits = read_mask(folder / "mask.fits")
    assert (bits == made.mask).all() and (bad == (made.mask > 0)).all()
    (tmp_path / "no.fits").write_text("no mask")
    with pytest.raises(RequestError, match=r"no\.fits: cannot be read as a mask"):
        read_mask(tmp_path / "no.fits")


def test_files_do_not_depend_on_when_they_are_written(written, tmp_path):
    made, folder = written
    write_mask(tmp_path / "again.fits", made, serial="A-1")
    assert (tmp_path / "again.fits").read_bytes() == (folder / "mask.fits").read_bytes()


def test_reduction_software_takes_the_mask_as_it_is(written, outside):
    """CCDData carries it, photutils leaves masked pixels out, scikit-image fills them in."""
    _, folder = written
    bad, _ = read_mask(folder / "mask.fits")
    image = np.full(bad.shape, 10.0)
    image[bad] = 5000.0
    frame = CCDData(image, unit=units.adu, mask=bad)
    aperture = CircularAperture((20.0, 12.0), 5.0)
    clean = aperture_photometry(frame.data, aperture, mask=frame.mask)["aperture_sum"][0]
    whole = aperture_photometry(np.full(bad.shape, 10.0), aperture, mask=bad)["aperture_sum"][0]
    outside(
        "photometry across a masked column",
        source="photutils.aperture with the mask",
        standing="library",
        expected=whole,
        found=clean,
        rtol=1e-12,
    )
    filled = inpaint_biharmonic(frame.data, frame.mask)
    outside(
        "masked pixels filled in",
        source="skimage.restoration.inpaint_biharmonic of a flat image",
        standing="library",
        expected=10.0,
        found=float(filled[bad].mean()),
        atol=1e-6,
    )


def test_clusters_are_the_regions_that_scikit_image_labels(outside):
    rng = np.random.default_rng(12)
    image = rng.random((200, 300)) < 0.06
    rows, columns = (place.astype(np.int32) for place in np.nonzero(image))
    found = groups(rows, columns, ClusterOptions(distance=1, smallest=3))
    regions = [one for one in regionprops(label(image, connectivity=2)) if one.area >= 3]
    outside(
        "clusters of three pixels or more, 8-connected: sizes",
        source="skimage.measure.label and regionprops",
        standing="library",
        expected=sorted(int(one.area) for one in regions),
        found=sorted(len(group) for group in found),
    )
    boxes = {
        (rows[g].min(), columns[g].min(), rows[g].max() + 1, columns[g].max() + 1) for g in found
    }
    assert boxes == {tuple(one.bbox) for one in regions}
