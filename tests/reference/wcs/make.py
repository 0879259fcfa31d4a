#!/usr/bin/env python3
"""Sky positions of some pixels by astropy (WCSLIB for TPV, its own code for SIP).

    python3 make.py > astropy_positions.csv
"""

import os

import numpy as np
from astropy.io import fits
from astropy.wcs import WCS

HERE = os.path.dirname(os.path.abspath(__file__))


def main():
    print("file,x_px,y_px,ra_deg,dec_deg")  # pixels count from 0
    for name in ("same_solution_tpv.hdr", "same_solution_sip.hdr"):
        with open(os.path.join(HERE, name)) as text:
            header = fits.Header.fromstring(text.read())
        system = WCS(header)
        for x in np.linspace(0, 2047, 5):
            for y in np.linspace(0, 4095, 5):
                ra, dec = system.all_pix2world(x, y, 0)
                print(f"{name},{x},{y},{float(ra):.12f},{float(dec):.12f}")


main()
