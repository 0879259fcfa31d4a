"""Writes crosstalk products with astropy, as a user's own script would (docs/crosstalk_product.md)."""
import numpy as np
from astropy.io import fits

TABLES = {
    "PAIRS": {"victim": "40A", "source": "40A", "coefficient": "D", "error": "D", "pixels": "J",
              "exposures": "J", "chi2": "D", "significance": "D", "status": "12A"},
    "BENDS": {"victim": "40A", "source": "40A", "onset_adu": "D", "c1": "D", "c2": "D", "c3": "D",
              "error": "D", "clipped": "D", "clipped_error": "D"},
    "PRIORS": {"stratum": "8A", "mean": "D", "spread": "D"},
}


def write(path, camera, pairs=(), bends=(), priors=()):
    """pairs, bends, priors: a dictionary for each row; numbers that are left out are NaN or 0."""
    primary = fits.PrimaryHDU()
    primary.header["FORMAT"] = "straymark-crosstalk/1"
    primary.header["CAMERA"] = camera
    primary.header["VERSION"] = "test"
    hdus = [primary]
    for name, rows in (("PAIRS", pairs), ("BENDS", bends), ("PRIORS", priors)):
        rest = {"A": "", "D": np.nan, "J": 0}
        columns = [fits.Column(column, form,
                               array=np.array([row.get(column, rest[form[-1]]) for row in rows],
                                              dtype={"A": "U40", "D": float, "J": int}[form[-1]]))
                   for column, form in TABLES[name].items()]
        if rows or name == "PAIRS":
            hdus.append(fits.BinTableHDU.from_columns(columns, name=name))
    path.parent.mkdir(parents=True, exist_ok=True)
    fits.HDUList(hdus).writeto(path, overwrite=True, checksum=True)
