"""Writes a crosstalk product as somebody else's program would, with astropy alone.

usage: astropy_product.py OUT
Integers of several widths, scaled and null-bearing columns, logicals, an array column, a long
file of names; product_test.cpp states what must come back.
"""

import sys

import numpy
from astropy.io import fits


def main(path):
    primary = fits.PrimaryHDU()
    primary.header["FORMAT"] = "straymark-crosstalk/1"
    primary.header["CAMERA"] = "petrel"
    primary.header["MODE"] = "fast"
    primary.header["VERSION"] = "2031-a"
    primary.header["MJDFROM"] = 60000.25
    pairs = fits.BinTableHDU.from_columns(
        [
            fits.Column("Victim", "8A", array=["d1/a01", "d1/a02", "d2/a16"]),
            fits.Column("Source", "8A", array=["d1/a03", "d1/a01", "d1/a01"]),
            fits.Column("Coefficient", "D", array=[2.7e-4, -7e-5, numpy.nan]),
            fits.Column("Error", "E", array=[0.5, 0.25, 0.125]),
            fits.Column("pixels", "J", array=[1, -2, 2147483647]),
            fits.Column("exposures", "I", bscale=1, bzero=32768,
                        array=numpy.array([0, 40000, 65535], dtype=numpy.uint16)),
            fits.Column("byte", "B", array=[0, 128, 255]),
            fits.Column("wide", "K", array=[0, -(2 ** 62), 2 ** 62]),
            fits.Column("scaled", "I", array=[1, 2, 4]),
            fits.Column("nullable", "J", null=-99, array=[7, -99, 9]),
            fits.Column("flag", "L", array=[True, False, True]),
            fits.Column("covariance", "4D", array=numpy.zeros((3, 4))),
        ],
        name="pairs",
    )
    fits.HDUList([primary, pairs]).writeto(path)
    # Scaled by the header alone: astropy's own scaling of columns cannot write this one.
    fits.setval(path, "TSCAL9", value=0.5, ext=1)
    fits.setval(path, "TZERO9", value=10.0, ext=1)


if __name__ == "__main__":
    main(*sys.argv[1:])
