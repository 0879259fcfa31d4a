"""Writes one star list in every form that `stars import` reads, with astropy, and checks indexed
lists with it.

    astropy_star_tables.py write STARS.csv FOLDER
    astropy_star_tables.py check LIST.fits STARS.csv
"""

import sys

import numpy as np
from astropy.io import fits
from astropy.table import Table


def read(path):
    return Table.read(path, format="ascii.csv", converters={"id": [str]})


def write(source, folder):
    table = read(source)
    for name, unit in (("ra", "deg"), ("dec", "deg"), ("epoch", "yr"), ("pmra", "mas/yr"),
                       ("pmdec", "mas/yr"), ("mag_r", "mag")):
        table[name].unit = unit
    table.write(f"{folder}/stars.fits", format="fits")
    for form in ("tabledata", "binary", "binary2"):
        table.write(f"{folder}/stars.{form}.vot", format="votable", tabledata_format=form)
    # The same with whole numbers for names, as large surveys have them.
    table["id"] = np.arange(len(table), dtype=np.int64) + 4 * 10**18
    table.write(f"{folder}/numbers.fits", format="fits")
    table.write(f"{folder}/numbers.binary.vot", format="votable", tabledata_format="binary")
    table.write(f"{folder}/numbers.csv", format="ascii.csv")


def check(path, source):
    stars = read(source)
    with fits.open(path) as listing:
        listing.verify("exception")
        data = listing["STARS"].data
        index = listing["INDEX"].data
    assert len(data) == len(stars) == index["rows"].sum()
    assert (np.diff(index["cell"]) > 0).all()
    assert (index["first"][1:] == np.cumsum(index["rows"])[:-1]).all()
    by_id = {name: i for i, name in enumerate(stars["id"])}
    order = [by_id[name] for name in data["id"]]
    for name in ("ra", "dec"):
        assert (data[name] == stars[name][order]).all(), name
    for name in ("epoch", "pmra", "pmdec", "mag_r"):
        assert np.array_equal(data[name], stars[name][order].astype("f4")), name


if __name__ == "__main__":
    {"write": write, "check": check}[sys.argv[1]](*sys.argv[2:])
