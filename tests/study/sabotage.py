#!/usr/bin/env python3
"""Does `score` notice a wrong camera file or product?

Takes a simulated night (the folder that `straymark simulate` wrote, its star list imported; or a
scenario, which is simulated first), spoils one thing at a time in a copy of its camera file or
crosstalk product, builds masks with that and scores them against the truth. The unchanged night must
meet every figure, and each sabotage must make at least one figure fail. Prints a table; the exit
status is 0 only then.

    /usr/bin/python3 tests/study/sabotage.py build/release/straymark demo_data/night
    /usr/bin/python3 tests/study/sabotage.py build/release/straymark tests/study/small_night.yaml

Needs Debian's python3-astropy, python3-numpy and python3-yaml.
"""
import argparse
import copy
import csv
import json
import pathlib
import shutil
import subprocess
import sys
import tempfile

import numpy as np
import yaml
from astropy.io import fits

MET, NOT_MET = 0, 1  # exit status of `score`


class Observatory:
    """Camera file, its tables and the crosstalk product, in memory, to be spoilt and written."""

    def __init__(self, night):
        site_path = night / "site.yaml"
        self.site = yaml.safe_load(site_path.read_text())
        self.stars = (night / self.site["stars"]).resolve()
        camera_path = night / self.site["camera"]
        self.camera = yaml.safe_load(camera_path.read_text())
        self.amplifiers = read_table(camera_path.parent / self.camera["amplifier_table"])
        pairs = self.camera.get("pair_table")
        self.pair_offsets = read_table(camera_path.parent / pairs) if pairs else []
        self.product = Product(next((night / self.site["calibrations"]).glob("*.fits")))

    def write(self, folder):
        """Writes everything into `folder`; returns the path of the site file."""
        (folder / "calib").mkdir(parents=True)
        self.product.write(folder / "calib" / "crosstalk.fits")
        self.camera["amplifier_table"] = "amplifiers.csv"
        write_table(folder / "amplifiers.csv", self.amplifiers)
        if self.pair_offsets:
            self.camera["pair_table"] = "pairs.csv"
            write_table(folder / "pairs.csv", self.pair_offsets)
        (folder / "camera.yaml").write_text(yaml.safe_dump(self.camera, sort_keys=False))
        site = {
            "format": self.site["format"],
            "camera": "camera.yaml",
            "calibrations": "calib/",
            "stars": str(self.stars),
            "history": "history.sqlite",
            "masks": "masks/",
            "digests": "digests/",
        }
        (folder / "site.yaml").write_text(yaml.safe_dump(site, sort_keys=False))
        return folder / "site.yaml"

    def detector(self, name):
        return next(d for d in self.camera["detectors"] if d["id"] == name)

    def own_layout(self, detector_name):
        """A layout that this detector alone has, so that one detector can be spoilt."""
        detector = self.detector(detector_name)
        layout = copy.deepcopy(self.camera["layouts"][detector["layout"]])
        detector["layout"] = "spoilt"
        self.camera["layouts"]["spoilt"] = layout
        return layout

    def trust_camera_file(self):
        """Raw headers that contradict the camera file are no longer asked."""
        for entry in ("prescan", "detector_section"):
            self.camera["raw"].pop(entry, None)

    def own_amplifier(self, name):
        detector, amplifier = name.split("/")
        return next(a for a in self.own_layout(detector)["amplifiers"] if a["id"] == amplifier)


class Product:
    """The tables of a crosstalk product, as arrays."""

    COEFFICIENTS = {
        "PAIRS": ("coefficient",),
        "LAGS": ("coefficient",),
        "BENDS": ("c1", "c2", "c3", "clipped"),
    }
    ERRORS = {"PAIRS": ("error",), "LAGS": ("error",), "BENDS": ("clipped_error",)}

    def __init__(self, path):
        with fits.open(path) as hdus:
            self.header = hdus[0].header.copy()
            self.layouts = {h.name: [(c.name, c.format, c.unit) for c in h.columns] for h in hdus[1:]}
            self.tables = {
                h.name: {name: np.array(h.data[name]) for name, _, _ in self.layouts[h.name]} for h in hdus[1:]
            }

    def write(self, path):
        header = self.header.copy()
        for keyword in ("FILESIZE", "CHECKSUM", "DATASUM"):  # of the file that was read
            header.remove(keyword, ignore_missing=True)
        hdus = [fits.PrimaryHDU(header=header)]
        for table, layout in self.layouts.items():
            columns = [
                fits.Column(name, form, unit, array=self.tables[table][name]) for name, form, unit in layout
            ]
            hdus.append(fits.BinTableHDU.from_columns(columns, name=table))
        fits.HDUList(hdus).writeto(path, checksum=True)

    def rows(self, table, victim, source):
        data = self.tables[table]
        return (data["victim"] == victim) & (data["source"] == source)

    def scale(self, factor, victim=None, source=None):
        """Multiplies all coefficients, or those of one pair, and their errors."""
        for table, columns in self.COEFFICIENTS.items():
            data = self.tables[table]
            chosen = slice(None) if victim is None else self.rows(table, victim, source)
            for column in columns:
                data[column][chosen] *= factor
            for column in self.ERRORS[table]:
                data[column][chosen] *= abs(factor)

    def transpose(self):
        for table in self.COEFFICIENTS:
            data = self.tables[table]
            data["victim"], data["source"] = data["source"], data["victim"]

    def forget(self, amplifier):
        """Leaves out every pair of one amplifier."""
        for table in self.COEFFICIENTS:
            data = self.tables[table]
            kept = (data["victim"] != amplifier) & (data["source"] != amplifier)
            self.tables[table] = {name: cells[kept] for name, cells in data.items()}

    def delay(self, victim, source, ticks):
        """Moves all coefficients of one pair to later ticks; lag 0 stands in PAIRS."""
        pairs, lags = self.tables["PAIRS"], self.tables["LAGS"]
        row = self.rows("PAIRS", victim, source)
        moved = self.rows("LAGS", victim, source)
        lags["lag"][moved] += ticks
        to_zero = moved & (lags["lag"] == 0)
        first = {
            "victim": victim,
            "source": source,
            "lag": ticks,
            "coefficient": pairs["coefficient"][row][0],
            "error": pairs["error"][row][0],
        }
        pairs["coefficient"][row] = lags["coefficient"][to_zero][0] if to_zero.any() else 0.0
        for column in lags:
            kept = lags[column][~to_zero]
            lags[column] = np.concatenate([kept, np.array([first[column]])])


def read_table(path):
    with open(path, newline="") as file:
        return list(csv.DictReader(line for line in file if not line.startswith("#")))


def write_table(path, rows):
    with open(path, "w", newline="") as file:
        writer = csv.DictWriter(file, list(rows[0]))
        writer.writeheader()
        writer.writerows(rows)


# Sabotages: each spoils an observatory, given the pair on which most rests.


def turn(part, other):
    def spoil(observatory, victim, source):
        observatory.trust_camera_file()
        amplifier = observatory.own_amplifier(victim)
        corner = amplifier["corner"]
        amplifier["corner"] = corner.replace(part, other) if part in corner else corner.replace(other, part)

    return spoil


def prescan_off_by_one(observatory, victim, source):
    observatory.trust_camera_file()
    observatory.own_layout(victim.split("/")[0])["prescan"] += 1


def gain_of_one_amplifier(observatory, victim, source):
    for row in observatory.amplifiers:
        if f"{row['detector']}/{row['amplifier']}" == victim:
            row["gain"] = f"{float(row['gain']) * 1.1:.6f}"


def clock_of_its_own(observatory, victim, source):
    detector, amplifier = victim.split("/")
    observatory.detector(detector)["amplifiers"] = {amplifier: {"clock": "apart"}}
    # Tables that still couple it would be refused.
    observatory.pair_offsets = [r for r in observatory.pair_offsets if victim not in r.values()]
    observatory.product.forget(victim)


def pair_offset(observatory, victim, source):
    rows = observatory.pair_offsets
    known = [r for r in rows if r["victim"] == victim and r["source"] == source]
    if known:
        known[0]["offset"] = str(int(known[0]["offset"]) + 1)
    else:
        rows.append({"source": source, "victim": victim, "offset": "1"})


def product_scaled(factor):
    return lambda observatory, victim, source: observatory.product.scale(factor)


def pair_scaled(factor):
    return lambda observatory, victim, source: observatory.product.scale(factor, victim, source)


def pair_delayed(observatory, victim, source):
    observatory.product.delay(victim, source, 1)


def transposed(observatory, victim, source):
    observatory.product.transpose()


# name, what spoils
SABOTAGES = [
    ("corner along x", turn("left", "right")),
    ("corner along y", turn("lower", "upper")),
    ("prescan off by one", prescan_off_by_one),
    ("gain of one amplifier +10 %", gain_of_one_amplifier),
    ("one amplifier on a clock of its own", clock_of_its_own),
    ("offset of one pair +1 tick", pair_offset),
    ("sign of one coefficient", pair_scaled(-1.0)),
    ("one coefficient doubled", pair_scaled(2.0)),
    ("one pair one tick late", pair_delayed),
    ("matrix transposed", transposed),
    ("matrix of opposite sign", product_scaled(-1.0)),
    ("matrix doubled", product_scaled(2.0)),
    ("matrix halved", product_scaled(0.5)),
]


class Trial:
    """Builds and scores in a folder of its own."""

    def __init__(self, options, folder):
        self.options = options
        self.folder = folder

    def build(self, observatory):
        """Returns the finished process."""
        site = observatory.write(self.folder)
        return self.run("build", "--site", str(site), *map(str, self.options.raw))

    def score(self):
        (self.folder / "masks").mkdir(exist_ok=True)
        truth = self.folder / "truth"
        truth.mkdir()
        for path in self.options.truth:
            (truth / path.name).symlink_to(path)
        done = self.run("score", "--masks", str(self.folder / "masks"), "--truth", str(truth))
        return done.returncode, json.loads(done.stdout) if done.stdout else {}, done.stderr

    def run(self, command, *arguments):
        return subprocess.run(
            [self.options.straymark, command, "--json", "--threads", str(self.options.threads), *arguments],
            capture_output=True,
            text=True,
            check=False,
        )


def failed_figures(result):
    return [f["name"] for f in result.get("figures", []) if not f["met"]]


def busiest_pair(result):
    """The pair with most compared echoes: what is spoilt must show."""
    best = max(result["pairs"], key=lambda pair: (pair["matches"], pair["victim"], pair["source"]))
    return best["victim"], best["source"]


def judge(name, built, status, result, complaint):
    """Prints a row; returns whether the score failed, on masks that were made."""
    noticed = status == NOT_MET and bool(result)
    how = ", ".join(failed_figures(result)) if noticed else built.stderr + complaint
    print(f"{'noticed' if noticed else 'SURVIVED':<9} {name:<36} {how.strip()}", flush=True)
    return noticed


def baseline(options, night, folder):
    trial = Trial(options, folder)
    built = trial.build(Observatory(night))
    status, result, complaint = trial.score()
    good = status == MET
    print(f"{'passes' if good else 'FAILS':<9} {'nothing spoilt':<36} "
          f"{', '.join(failed_figures(result))} {'' if good else built.stderr + complaint}", flush=True)
    return good, result


def arguments():
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("straymark", help="the program")
    parser.add_argument("night", type=pathlib.Path, help="folder that `straymark simulate` wrote, or a scenario file")
    parser.add_argument("--exposures", type=int, default=0, help="use the first N only (default: all)")
    parser.add_argument("--only", nargs="*", help="names of sabotages to try (default: all)")
    parser.add_argument("--threads", type=int, default=2)
    options = parser.parse_args()
    options.straymark = str(pathlib.Path(options.straymark).resolve())
    return options


def simulated(options, folder):
    """The night's folder, made from a scenario where that was given."""
    if options.night.is_dir():
        return options.night
    for arguments in (
        ("simulate", str(options.night), "--out", str(folder)),
        ("stars", "import", str(folder / "stars.csv"), "--out", str(folder / "stars.fits")),
    ):
        subprocess.run([options.straymark, *arguments, "--quiet"], check=True)
    return folder


def choose_exposures(options):
    """Sets the truth files and raw files to use."""
    truth = sorted((options.night / "truth").resolve().glob("*.truth.fits"))
    options.truth = truth[: options.exposures or None]
    names = {path.name.removesuffix(".truth.fits") for path in options.truth}
    options.raw = [p for p in sorted((options.night / "raw").resolve().iterdir()) if p.stem in names]
    if not options.truth or len(options.raw) != len(options.truth):
        sys.exit(f"{options.night}: {len(options.raw)} raw exposures, {len(options.truth)} with their truth")


def main():
    options = arguments()
    survivors = 0
    with tempfile.TemporaryDirectory(prefix="sabotage") as work:
        work = pathlib.Path(work)
        options.night = simulated(options, work / "night")
        choose_exposures(options)
        good, result = baseline(options, options.night, work / "unchanged")
        if not result.get("pairs"):
            sys.exit("nothing to spoil: no echo was compared")
        victim, source = busiest_pair(result)
        print(f"          spoilt pair: {source} to {victim}; spoilt amplifier: {victim}")
        for number, (name, spoil) in enumerate(SABOTAGES):
            if options.only and name not in options.only:
                continue
            folder = work / str(number)
            observatory = Observatory(options.night)
            spoil(observatory, victim, source)
            trial = Trial(options, folder)
            built = trial.build(observatory)
            survivors += not judge(name, built, *trial.score())
            shutil.rmtree(folder)
    print(f"{survivors} survived" if survivors else "all noticed")
    sys.exit(0 if good and not survivors else 1)


if __name__ == "__main__":
    main()
