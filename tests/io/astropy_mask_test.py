"""Reads a mask file with astropy, every warning an error, and compares it with what was written.

usage: astropy_mask_test.py MASK PLAIN
PLAIN holds the same images uncompressed, as written by CFITSIO. The tables are those that
mask_store_test.cpp made.
"""

import sys

import numpy
from astropy.io import fits
from astropy.wcs import WCS

LONG_DIGEST = "xxh128:" + "a" * 500 + "&'" + "b" * 67


def check_primary(header):
    assert header["OBS_ID"] == "petrel-0001"
    assert header["RAWFILE"] == "n%C3%A4chtlich's 100% [1].fits", header["RAWFILE"]
    assert header["EMPTY"] == ""
    assert header["DIGEST1"] == LONG_DIGEST
    assert header["WIDE"] == "w" * 60
    assert header.comments["WIDE"].strip() == "a comment that needs a card of its own"
    assert header["BUILDKEY"] == "xxh128:0123456789abcdef0123456789abcdef"


def check_images(mask, plain):
    names = [hdu.name for hdu in mask if isinstance(hdu, fits.CompImageHDU)]
    assert names == ["d1", "d2"], names
    for name, expected in zip(names, plain):
        image = mask[name]
        assert image.data.dtype.newbyteorder("=") == numpy.int16
        assert numpy.array_equal(image.data, expected.data)
    header = mask["d1"].header
    assert header["NAXIS1"] == 200 and header["CRVAL1"] == 150.0
    ra, dec = WCS(header).all_pix2world(100.5, 60.5, 1)
    assert abs(ra - 150) < 1e-12 and abs(dec - 2) < 1e-12


def check_bits(rows):
    # The contract on bits, written out a second time (docs/mask_file.md).
    names = ("saturated bleed crosstalk_positive crosstalk_negative ghost spike persistence defect "
             "marginal crosstalk_unassessed ghost_unassessed spike_unassessed "
             "persistence_unassessed").split()
    assert list(rows["name"]) == names
    assert list(rows["bit"]) == list(range(13))
    assert list(rows["value"]) == [2 ** bit for bit in range(13)]
    assert list(rows["mask_by_default"]) == [True] * 8 + [False] * 5
    assert all(meaning for meaning in rows["meaning"])


def check_marks(table):
    rows = table.data
    assert len(rows) == 2
    assert rows["cause"][0] == "echo of d1/a03 at (101, 877)"
    assert rows["cause"][1] == "c" * 300 + "%0A%7F"
    assert numpy.isnan(rows["source_x"][0]) and rows["x"][0] == 101.25
    assert rows["x1"][0] == -1 and rows["x2"][0] == 2048
    assert rows["strength_e"][0] == -1 / 3
    assert rows["area_px"][0] == 2 ** 40 and rows["count"][0] == 1
    assert table.columns["strength_e"].unit == "electron"


def check_detection(rows):
    assert rows["amplifier"][0] == "a01" and rows["noise_e"][0] == 5.0
    assert rows["background_px"][0] == 64 and rows["template_noise"][0] == 0.25
    thresholds = [rows["threshold_" + kind][0]
                  for kind in ("crosstalk", "ghost", "spike", "persistence")]
    assert thresholds == [1.0, 0.5, 2.0, 1.25]


def check_psf(rows):
    assert list(rows["detector"]) == ["d1", "d2"]
    stamp = numpy.array([0, .1, 0, .1, .6, .1, 0, .1, 0], dtype=numpy.float32)
    assert numpy.array_equal(rows["values"][0], stamp)
    assert len(rows["values"][1]) == 0
    assert rows["radius_px"][0] == 1 and rows["stars"][0] == 31


def main(mask_path, plain_path):
    with fits.open(mask_path, checksum=True) as mask, fits.open(plain_path) as plain:
        mask.verify("exception")
        check_primary(mask[0].header)
        assert all("CHECKSUM" in hdu.header and "DATASUM" in hdu.header for hdu in mask
                   if not isinstance(hdu, fits.CompImageHDU))
        check_images(mask, plain)
        check_bits(mask["BITS"].data)
        check_marks(mask["MARKS"])
        check_detection(mask["DETECTION"].data)
        check_psf(mask["PSF"].data)
        assert mask["ASSESSED"].data["state"][0] == "off"
    with fits.open(mask_path, checksum=True, disable_image_compression=True) as tables:
        for table in tables:
            assert "CHECKSUM" in table.header and "DATASUM" in table.header
            table.data  # a wrong sum would warn


if __name__ == "__main__":
    main(*sys.argv[1:])
