#!/usr/bin/env python3
"""A published coupling table, injected into pixels by numpy and predicted by the program.

Usage: published_coupling_test.py PROGRAM

Everything the check rests on (echoes, noise, point-spread function, response) is known from the
injection. Only the layout of the files is shared with the program.
"""
import csv
import pathlib
import shutil
import sys
import tempfile

import numpy as np
from astropy.io import fits

ROOT = pathlib.Path(__file__).resolve().parents[2]
sys.path.insert(0, str(ROOT / "tests" / "support"))
import crosstalk_product  # noqa: E402
import small_night  # noqa: E402
import star_field  # noqa: E402

QUADRANTS = {"ul": "upper_left", "ur": "upper_right", "ll": "lower_left", "lr": "lower_right"}
SIDE = 512            # of a quadrant
OVERSCAN = 32
CLIP = 65535          # where the table's regimes part
BIAS = {"ul": 1010.0, "ur": 985.0, "ll": 1100.0, "lr": 1043.0}
GAIN = {"ul": 1.45, "ur": 1.52, "ll": 1.38, "lr": 1.60}
SKY_E, READ_E = 260.0, 5.0
WIDTH = 3.0           # pixels, full width at half maximum
COEFFICIENT_ERROR = 0.01
POSITIVE, NEGATIVE, UNASSESSED = 4, 8, 512

# Response: the measured profile and noise differ from the true ones by about a percent each (see
# docs/methods/exposure.md), and the largest response of a flat-topped echo by less.
RESPONSE_TOLERANCE = 0.04
# Strength: sky and bias are known to 1 ADU in a thousand or more, pixel by pixel the same values.
STRENGTH_TOLERANCE = 0.01


def read_table():
    """coefficient[regime][source, victim], rows taken as sources (see SOURCE.md)."""
    table = {"lo": {}, "hi": {}}
    path = ROOT / "tests" / "reference" / "published_coupling" / "four_quadrants.csv"
    with open(path, encoding="utf-8") as file:
        for row in csv.DictReader(file):
            for victim in QUADRANTS:
                if victim != row["row"]:
                    table[row["regime"]][row["row"], victim] = float(row[victim])
    return table


def star_light(random):
    """Electrons above sky of each quadrant, in read-out order, and places of the bright stars."""
    light = {}
    for name in QUADRANTS:
        image = np.zeros((SIDE, SIDE))
        bright = star_field.scattered(random, 12, SIDE, SIDE, 25, 45)
        for n, (x, y) in enumerate(bright):
            peak_adu = random.uniform(25e3, 55e3) if n % 2 else random.uniform(1e5, 4e5)
            peak = star_field.moffat(WIDTH, 0, 0, 0).item()
            star_field.add_star(image, x, y, peak_adu * GAIN[name] / peak, WIDTH, 40)
        for x, y in star_field.scattered(random, 40, SIDE, SIDE, 15, 18, bright):
            star_field.add_star(image, x, y, random.uniform(5e3, 3e4), WIDTH, 24)
        light[name] = image
    return light


def exposed(random, light, table):
    """Raw pixels in read-out order with overscan, and the injected echo in electrons by
    (source, victim)."""
    video = {}
    for name in QUADRANTS:
        electrons = random.poisson(light[name] + SKY_E) + random.normal(0, READ_E, (SIDE, SIDE))
        video[name] = electrons / GAIN[name] + BIAS[name]
    signal, clipped = {}, {}
    for name in QUADRANTS:
        digital = np.minimum(np.rint(video[name]), CLIP)
        clipped[name] = digital == CLIP
        signal[name] = digital - BIAS[name] - SKY_E / GAIN[name]
    echoes, raw = {}, {}
    for victim in QUADRANTS:
        total = video[victim].copy()
        for source in QUADRANTS:
            if source != victim:
                lo, hi = table["lo"][source, victim], table["hi"][source, victim]
                echo = np.where(clipped[source], hi, lo) * signal[source]
                echoes[source, victim] = echo * GAIN[victim]
                total += echo
        dark = random.normal(BIAS[victim], READ_E / GAIN[victim], (SIDE, OVERSCAN))
        raw[victim] = np.clip(np.rint(np.hstack([total, dark])), 0, CLIP).astype(np.uint16)
    return raw, echoes


def on_detector(name, image):
    """A quadrant's picture from read-out order to the detector's."""
    image = image[:, ::-1] if "right" in QUADRANTS[name] else image
    return image[::-1, :] if "upper" in QUADRANTS[name] else image


def section(name):
    x = SIDE if "right" in QUADRANTS[name] else 0
    y = SIDE if "upper" in QUADRANTS[name] else 0
    return slice(y, y + SIDE), slice(x, x + SIDE)


def write_raw(path, raw):
    primary = fits.PrimaryHDU()
    primary.header.update({"OBSID": "coupling-1", "MJD-OBS": 55600.2, "EXPTIME": 60.0, "FILTER": "r",
                           "RA": 10.0, "DEC": 10.0})
    hdus = [primary]
    for name, pixels in raw.items():
        hdu = fits.ImageHDU(pixels, name=name)
        hdu.header["DATASEC"] = f"[1:{SIDE},1:{SIDE}]"
        hdu.header["BIASSEC"] = f"[{SIDE + 1}:{SIDE + OVERSCAN},1:{SIDE}]"
        hdus.append(hdu)
    fits.HDUList(hdus).writeto(path, checksum=True)


def write_site(folder):
    amplifiers = "\n".join(
        f"      - {{id: {name}, section: [{x.start + 1}, {x.stop}, {y.start + 1}, {y.stop}], "
        f"corner: {QUADRANTS[name]}}}" for name in QUADRANTS for y, x in [section(name)])
    (folder / "quadrants.yaml").write_text(f"""format: straymark-camera/1
name: quadrants
observatory: {{latitude_deg: -30, longitude_deg: -70, height_m: 2000}}
telescope: {{mount: equatorial, aperture_mm: 1000, obstruction_mm: 300, focal_length_mm: 10000}}
focal_plane: {{pixel_um: 15, parity: 1, camera_angle_deg: {{zero: 0}}}}
filters:
  r: {{wavelength_nm: 620, width_nm: 140, zero_point: 24, extinction: 0.1}}
layouts:
  four:
    size: [{2 * SIDE}, {2 * SIDE}]
    amplifiers:
{amplifiers}
detectors:
  - {{id: ccd, layout: four, centre_mm: [0, 0], clock: main}}
amplifier_table: quadrants.csv
readout_s: 20
headers: {{id: OBSID, start: MJD-OBS, exposure: EXPTIME, filter: FILTER, ra: RA, dec: DEC}}
raw: {{hdu: "{{amplifier}}", data: DATASEC, bias: BIASSEC, order: readout}}
""")
    rows = "".join(f"ccd,{name},{GAIN[name]},{READ_E},{CLIP}\n" for name in QUADRANTS)
    (folder / "quadrants.csv").write_text("detector,amplifier,gain,read_noise,saturation\n" + rows)
    (folder / "site.yaml").write_text("""format: straymark-site/1
camera: quadrants.yaml
calibrations: calib/
stars: stars.fits
history: history.sqlite
masks: masks/
digests: digests/
""")
    (folder / "stars.csv").write_text("id,ra,dec,mag\none,200,10,9\n")


def write_product(path, table, columns_are_sources=False, clipped=True):
    pairs, bends = [], []
    for source, victim in table["lo"]:
        key = (victim, source) if columns_are_sources else (source, victim)
        names = {"victim": f"ccd/{victim}", "source": f"ccd/{source}"}
        lo, hi = table["lo"][key], table["hi"][key]
        pairs.append({**names, "coefficient": lo, "error": COEFFICIENT_ERROR * lo,
                      "significance": 1 / COEFFICIENT_ERROR, "status": "detected"})
        bends.append({**names, "clipped": hi, "clipped_error": COEFFICIENT_ERROR * hi})
    crosstalk_product.write(path, "quadrants", pairs, bends if clipped else ())


def convolved(image):
    """Sum over q of image(q) P(q - p); P is symmetric."""
    psf = star_field.moffat(WIDTH, 0, 0, 14)
    psf /= psf.sum()
    shape = [n + psf.shape[0] - 1 for n in image.shape]
    full = np.fft.irfft2(np.fft.rfft2(image, shape) * np.fft.rfft2(psf, shape), shape)
    return full[14:14 + image.shape[0], 14:14 + image.shape[1]] / np.sqrt((psf ** 2).sum())


NOISE_E = np.sqrt(SKY_E + READ_E ** 2)


def faults_of_pixels(bits, echoes):
    """The mask's pixels against the true response of the injected sum, and what is wrong."""
    total = np.zeros((2 * SIDE, 2 * SIDE))
    for (_, victim), echo in echoes.items():
        total[section(victim)] += on_detector(victim, echo)
    response = convolved(total) / NOISE_E
    flagged = (bits & POSITIVE) != 0
    complete = flagged[response >= 1.5].mean()
    area = flagged.sum() / (response >= 1.0).sum()
    print(f"{(response >= 1.5).sum()} pixels of response 1.5 or more, {complete:.4f} of them flagged; "
          f"area {area:.3f}")
    return ([f"{complete:.4f} of the pixels that matter are flagged"] * bool(complete < 0.98) +
            [f"flagged area {area:.3f} times the true one"] * bool(area > 1.15) +
            ["a negative echo was flagged"] * bool((bits & NEGATIVE).any()) +
            ["unassessed pixels with every pair measured"] * bool((bits & UNASSESSED).any()))


def faults_of_marks(marks, echoes):
    """Each mark against the injected echo of its pair within the mark's box."""
    faults, compared, clipped_compared = [], 0, 0
    for (source, victim), echo in echoes.items():
        image = np.zeros((2 * SIDE, 2 * SIDE))
        image[section(victim)] = on_detector(victim, echo)
        response = convolved(image) / NOISE_E
        y, x = section(victim)
        own = [m for m in marks if m["source"] == f"ccd/{source}" and
               x.start < m["x"] <= x.stop and y.start < m["y"] <= y.stop]
        strong = [m for m in own if m["response"] >= 3]
        if not strong:
            faults.append(f"{source} in {victim}: no mark of response 3 or more")
        for mark in strong:
            box = (slice(mark["y1"] - 1, mark["y2"]), slice(mark["x1"] - 1, mark["x2"]))
            true_peak, true_response = image[box].max(), response[box].max()
            compared += 1
            for name, found, true, tolerance in (
                    ("peak_e", mark["peak_e"], true_peak, STRENGTH_TOLERANCE),
                    ("response", mark["response"], true_response, RESPONSE_TOLERANCE)):
                if not abs(found - true) <= tolerance * true:
                    faults.append(f"{source} in {victim} at {mark['x']:.0f}, {mark['y']:.0f}: {name} "
                                  f"{found:.2f}, injected {true:.2f}")
            # All of an echo rises and falls with its pair's coefficient, or two of them.
            relative = mark["response_error"] / mark["response"]
            if not COEFFICIENT_ERROR / np.sqrt(2) * 0.98 <= relative <= COEFFICIENT_ERROR * 1.02:
                faults.append(f"{source} in {victim}: relative error {relative:.4f}")
        clipped_compared += sum(m["peak_e"] > 0.98 * image.max() for m in strong)
    print(f"{compared} marks compared, {clipped_compared} of them of clipped stars")
    if compared < 60 or clipped_compared < 24:
        faults.append(f"only {compared} marks, {clipped_compared} clipped, to compare")
    return faults


def built(straymark, folder, what):
    straymark.must("build", "--site", folder / "site.yaml", what)
    with fits.open(folder / "masks" / "coupling.mask.fits", memmap=False) as mask:
        return mask["ccd"].data, mask["MARKS"].data


def main():
    straymark = small_night.Straymark(sys.argv[1])
    table = read_table()
    random = np.random.default_rng(2011)
    raw, echoes = exposed(random, star_light(random), table)
    folder = pathlib.Path(tempfile.mkdtemp(prefix="straymark-coupling-"))
    try:
        write_site(folder)
        straymark.must("stars", "import", folder / "stars.csv", "--covers", "200,10,1", "--out",
                       folder / "stars.fits")
        write_raw(folder / "coupling.fits", raw)
        failures = []
        write_product(folder / "calib" / "table.fits", table)
        bits, marks = built(straymark, folder, folder / "coupling.fits")
        failures += faults_of_pixels(bits, echoes) + faults_of_marks(marks, echoes)
        # A check that cannot fail is none: the other reading of the table, and no clipped values.
        for name, change in (("columns as sources", {"columns_are_sources": True}),
                             ("without the clipped regime", {"clipped": False})):
            write_product(folder / "calib" / "table.fits", table, **change)
            bits, marks = built(straymark, folder, "--from-digests")
            seen = faults_of_marks(marks, echoes)
            print(f"{name}: {len(seen)} faults seen")
            if not any("peak_e" in fault for fault in seen):
                failures.append(f"{name}: not noticed")
    finally:
        shutil.rmtree(folder)
    for failure in failures[:20]:
        print("FAILED:", failure)
    return 1 if failures else 0


if __name__ == "__main__":
    sys.exit(main())
