#!/usr/bin/env python3
"""Crosstalk bits of a built night against a dense sum over all pairs in numpy.

Usage: dense_crosstalk.py NIGHT [EXPOSURE]. NIGHT holds camera file, calib/, digests/ and masks/ as
`simulate` and `build` leave them; all pairs must be measured. Exit status 1 where a bit differs.
"""
import pathlib
import sys

import numpy as np
import yaml
from astropy.io import fits

# Verdicts may differ where the response is this close to the threshold: the program sums single
# precision values, and leaves out echoes that respond with up to kTruncation = 0.05 of the threshold
# on a plateau, and much less as the wings of a star do.
NEAR = 0.05


def in_clock_order(section_image, corner, serial):
    """A section of the detector, [y, x], as [row, tick]; its own inverse up to the transposition."""
    image = section_image
    if "right" in corner:
        image = image[:, ::-1]
    if "upper" in corner:
        image = image[::-1, :]
    return image.T if serial == "y" else image


def on_detector(clock_image, corner, serial):
    image = clock_image.T if serial == "y" else clock_image
    if "upper" in corner:
        image = image[::-1, :]
    if "right" in corner:
        image = image[:, ::-1]
    return image


def read_camera(night):
    site = yaml.safe_load((night / "site.yaml").read_text())
    camera = yaml.safe_load((night / site["camera"]).read_text())
    rows = (night / camera["amplifier_table"]).read_text().splitlines()
    header = rows[0].split(",")
    table = [dict(zip(header, row.split(","))) for row in rows[1:] if row and row[0] != "#"]
    gains = {(r["detector"], r["amplifier"]): float(r["gain"]) for r in table}
    offsets = {}
    if "pair_table" in camera:
        rows = (night / camera["pair_table"]).read_text().splitlines()
        header = rows[0].split(",")
        for row in rows[1:]:
            entry = dict(zip(header, row.split(",")))
            offsets[entry["source"], entry["victim"]] = int(entry["offset"])
    amplifiers = []
    for detector in camera["detectors"]:
        layout = camera["layouts"][detector["layout"]]
        for amplifier in layout["amplifiers"]:
            x1, x2, y1, y2 = amplifier["section"]
            amplifiers.append(dict(name=f"{detector['id']}/{amplifier['id']}", detector=detector["id"],
                                   box=(x1 - 1, x2, y1 - 1, y2), corner=amplifier["corner"],
                                   serial=layout.get("serial", "x"), prescan=layout.get("prescan", 0),
                                   size=layout["size"], gain=gains[detector["id"], amplifier["id"]]))
    return amplifiers, offsets


def read_sources(night, exposure, amplifiers):
    """Signal S and clipping of each amplifier as [row, tick] pictures, data ticks from 0."""
    with fits.open(night / "digests" / f"{exposure}.digest.fits") as digest:
        table, runs = digest["AMPLIFIERS"].data, digest["RUNS"].data
        values, saturated = digest["VALUES"].data, digest["SATURATED"].data
        at_run = at_value = at_span = 0
        value_column = values.dtype.names[0]
        for amplifier, row in zip(amplifiers, table):
            x1, x2, y1, y2 = amplifier["box"]
            shape = (y2 - y1, x2 - x1) if amplifier["serial"] == "x" else (x2 - x1, y2 - y1)
            signal, clipped = np.zeros(shape), np.zeros(shape, bool)
            first = amplifier["prescan"]
            own = values[value_column][at_value:at_value + row["values"]]
            for run in runs[at_run:at_run + row["runs"]]:
                t = run["tick"] - first
                signal[run["row"], t:t + run["length"]] = own[run["first"]:run["first"] + run["length"]]
            for span in saturated[at_span:at_span + row["saturated"]]:
                t = span["tick"] - first
                clipped[span["row"], t:t + span["length"]] = True
            at_run += row["runs"]
            at_value += row["values"]
            at_span += row["saturated"]
            amplifier.update(signal=signal, clipped=clipped)


def read_product(night):
    with fits.open(night / "calib" / "crosstalk.fits") as product:
        pairs = {(r["victim"].strip(), r["source"].strip()): dict(h=float(r["coefficient"]),
                 status=r["status"].strip(), lags={}, bend=None) for r in product["PAIRS"].data}
        if "LAGS" in product:
            for r in product["LAGS"].data:
                pairs[r["victim"].strip(), r["source"].strip()]["lags"][int(r["lag"])] = float(r["coefficient"])
        if "BENDS" in product:
            for r in product["BENDS"].data:
                pairs[r["victim"].strip(), r["source"].strip()]["bend"] = {
                    k: float(r[k]) for k in ("onset_adu", "c1", "c2", "c3", "clipped")}
    return pairs


def lag0(source, pair):
    """What a source pixel adds at its own tick, victim ADU."""
    signal = source["signal"]
    echo = (pair["h"] if pair["status"] == "detected" else 0.0) * signal
    bend = pair["bend"]
    if bend is not None:
        if np.isfinite(bend["onset_adu"]):
            x = np.maximum(signal - bend["onset_adu"], 0.0)
            echo = echo + bend["c1"] * x + bend["c2"] * x ** 2 + bend["c3"] * x ** 3
        if np.isfinite(bend["clipped"]):
            echo = np.where(source["clipped"], bend["clipped"] * signal, echo)
    return echo


def shifted(picture, ticks, shape):
    """The picture `ticks` later, on a victim of this shape: what falls beside it is lost."""
    out = np.zeros(shape)
    rows = min(shape[0], picture.shape[0])
    for t in range(max(0, ticks), min(shape[1], picture.shape[1] + ticks)):
        out[:rows, t] = picture[:rows, t - ticks]
    return out


def echo_on(victim, amplifiers, pairs, offsets):
    total = np.zeros(victim["signal"].shape)
    for source in amplifiers:
        pair = pairs.get((victim["name"], source["name"]))
        if pair is None or source is victim or not source["signal"].any():
            continue
        late = offsets.get((source["name"], victim["name"]), 0) + source["prescan"] - victim["prescan"]
        total += shifted(lag0(source, pair), late, total.shape)
        for lag, h in pair["lags"].items():
            total += shifted(h * source["signal"], late + lag, total.shape)
    return total * victim["gain"]


def filtered(signal, psf):
    """sum over q of a(q) P(q - p), zero beyond the edges."""
    r = psf.shape[0] // 2
    shape = [n + 2 * r for n in signal.shape]
    turned = np.fft.rfft2(psf[::-1, ::-1], shape)
    full = np.fft.irfft2(np.fft.rfft2(signal, shape) * turned, shape)
    return full[r:r + signal.shape[0], r:r + signal.shape[1]]


def main():
    night = pathlib.Path(sys.argv[1])
    amplifiers, offsets = read_camera(night)
    pairs = read_product(night)
    masks = sorted((night / "masks").glob("*.mask.fits"))
    if len(sys.argv) > 2:
        masks = [m for m in masks if m.name.startswith(sys.argv[2])]
    wrong = compared = flagged = 0
    for path in masks:
        with fits.open(path) as mask:
            read_sources(night, mask[0].header["OBS_ID"], amplifiers)
            noise = {f"{r['detector'].strip()}/{r['amplifier'].strip()}": float(r["noise_e"])
                     for r in mask["DETECTION"].data}
            for row in mask["PSF"].data:
                detector = row["detector"].strip()
                side = 2 * row["radius_px"] + 1
                psf = np.asarray(row["values"], float).reshape(side, side)
                own = [a for a in amplifiers if a["detector"] == detector]
                width, height = own[0]["size"]
                signal, sigma = np.zeros((height, width)), np.ones((height, width))
                for victim in own:
                    x1, x2, y1, y2 = victim["box"]
                    signal[y1:y2, x1:x2] = on_detector(echo_on(victim, amplifiers, pairs, offsets),
                                                       victim["corner"], victim["serial"])
                    sigma[y1:y2, x1:x2] = noise[victim["name"]]
                response = filtered(signal, psf) / (sigma * np.sqrt((psf ** 2).sum()))
                bits = mask[detector].data
                clear = np.abs(np.abs(response) - 1.0) > NEAR
                for bit, expected in ((4, response >= 1.0), (8, response <= -1.0)):
                    found = (bits & bit) != 0
                    wrong += int(((found != expected) & clear).sum())
                    flagged += int(found.sum())
                compared += int(clear.sum())
    print(f"{len(masks)} masks, {compared} pixels compared, {flagged} flagged, {wrong} differ")
    return 1 if wrong or not flagged else 0


if __name__ == "__main__":
    sys.exit(main())
