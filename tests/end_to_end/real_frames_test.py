#!/usr/bin/env python3
"""Real frames and headers through the camera files of config/examples, and out again with astropy.

Usage: real_frames_test.py PROGRAM
"""
import pathlib
import re
import shutil
import sys
import tempfile
import unittest
import warnings

import numpy as np
import yaml
from astropy.io import fits
from astropy.wcs import WCS

ROOT = pathlib.Path(__file__).resolve().parents[2]
sys.path.insert(0, str(ROOT / "tests" / "support"))
import crosstalk_product  # noqa: E402
import small_night  # noqa: E402
import star_field  # noqa: E402

EXAMPLES = ROOT / "config" / "examples"
REFERENCE = ROOT / "tests" / "reference"
FRAME = REFERENCE / "real_frames" / "saao_ste3_raw_a8280271.fits"
MOSAIC_HEADER = REFERENCE / "wcs" / "mosaic_header_tpv_two_amplifiers.fits"
CUT = REFERENCE / "wcs" / "amplifier_cut_tnx_reversed_section.fits"
GUIDE = ROOT / "docs" / "camera_from_header.md"
SATURATED, DEFECT, CROSSTALK, UNASSESSED = 1, 128, 4 | 8, 512
straymark = None


class Example:
    """A copy of config/examples with a star list and a product, to run one of its sites."""

    def __init__(self, name, pairs=(), priors=()):
        self.folder = pathlib.Path(tempfile.mkdtemp(prefix="straymark-real-"))
        for file in EXAMPLES.iterdir():
            shutil.copy(file, self.folder)
        self.site = self.folder / f"{name}_site.yaml"
        crosstalk_product.write(self.folder / "calib" / "crosstalk.fits", name, pairs, priors=priors)
        # One star, far from every field here: positions are then the header's.
        (self.folder / "stars.csv").write_text("id,ra,dec,mag\none,10,10,9\n")
        straymark.must("stars", "import", self.folder / "stars.csv", "--covers", "10,10,1", "--out",
                       self.folder / "stars.fits")

    def __enter__(self):
        return self

    def __exit__(self, *_):
        shutil.rmtree(self.folder)

    def check(self, raw):
        return straymark.run("check", "--site", self.site, raw)

    def build(self, raw):
        return straymark.run("build", "--site", self.site, raw)

    def mask(self, raw):
        return fits.open(self.folder / "masks" / (raw.stem + ".mask.fits"))


def header_of(path):
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        with fits.open(path, ignore_missing_end=True) as file:
            return file[0].header.copy()


def with_pixels(header, pixels):
    """A raw frame with a real header's cards and synthetic pixels."""
    header = header.copy()
    for keyword in ("SIMPLE", "BITPIX", "NAXIS", "NAXIS1", "NAXIS2", "EXTEND", "BSCALE", "BZERO",
                    "CHECKSUM", "DATASUM"):
        header.remove(keyword, ignore_missing=True)
    return fits.PrimaryHDU(pixels, header)


def assessed(mask):
    return {row["predictor"]: (row["state"], row["reason"]) for row in mask["ASSESSED"].data}


class TheRealFrame(unittest.TestCase):
    def test_goes_through_check_and_build(self):
        with Example("ste3") as example:
            check = example.check(FRAME)
            self.assertEqual(check.returncode, 0, check.stderr)
            # DATE-OBS, UT, FILTERS and the sections of its header; MJD-OBS lacks the time of day.
            for fact in ("MJD 56486.039965", "filter 48", "type 'object'"):
                self.assertIn(fact, check.stdout)
            build = example.build(FRAME)
            self.assertEqual(build.returncode, 0, build.stderr)
            with example.mask(FRAME) as mask:
                self.examine(mask)

    def examine(self, mask):
        bits = mask["ccd"].data
        self.assertEqual(bits.shape, (520, 512))
        # Nothing of this frame reaches 65535; the one listed defect is what the mask holds.
        self.assertEqual(fits.getdata(FRAME)[:, 16:528].max(), 1715)
        expected = np.zeros_like(bits)
        expected[199:260, 99:101] = DEFECT
        np.testing.assert_array_equal(bits, expected)
        self.assertEqual(assessed(mask)["crosstalk"][0], "assessed")
        self.assertEqual(len(mask["MARKS"].data), 0)
        amplifier = mask["DETECTION"].data[0]
        self.assertEqual(amplifier["state"], "ok")
        # Robust noise of this nearly empty frame in numpy, and the header's gain; both estimators
        # have errors of 0.3 % on the 266,240 pixels, and stars and the sky's slope widen numpy's.
        pixels = fits.getdata(FRAME)[:, 16:528].astype(float)
        noise = 1.4826 * np.median(np.abs(pixels - np.median(pixels)))
        self.assertAlmostEqual(amplifier["noise_e"] / (1.9 * noise), 1.0, delta=0.03)
        # Sky above the overscan (columns 4 to 13 of 536).
        overscan = fits.getdata(FRAME)[:, 3:13].astype(float)
        self.assertAlmostEqual(amplifier["sky_e"], 1.9 * (np.median(pixels) - overscan.mean()),
                               delta=1.9)  # ADU are whole numbers
        self.assertIn("NOTE1", mask[0].header)
        # The centre of the detector looks at RA, DEC of the header: 22:04:08, -00:55:31.
        sky = WCS(mask["ccd"].header).wcs_pix2world([[256.5, 260.5]], 1)[0]
        np.testing.assert_allclose(sky, [15 * (22 + 4 / 60 + 8 / 3600), -(55 / 60 + 31 / 3600)],
                                   atol=1e-9)

    def test_saturated_pixels_of_its_twin_are_flagged(self):
        pixels = fits.getdata(FRAME)
        pixels[300:303, 116:120] = 65535  # columns 117 to 120 of the file, 101 to 104 of the detector
        with Example("ste3") as example:
            raw = example.folder / "twin.fits"
            with_pixels(header_of(FRAME), pixels).writeto(raw)
            self.assertEqual(example.build(raw).returncode, 0)
            with example.mask(raw) as mask:
                expected = np.zeros((520, 512), bool)
                expected[300:303, 100:104] = True
                np.testing.assert_array_equal((mask["ccd"].data & SATURATED) != 0, expected)

    def test_is_refused_with_a_camera_file_that_misreads_it(self):
        # 1: the camera file contradicts itself; 3: it contradicts the frame.
        for change, words, status in (
                (("start: {date: DATE-OBS, time: UT}", "start: DATE-OBS"), "a date without a time", 3),
                (('"48":', '"4.8":'), "FILTERS", 3),
                (("size: [512, 520]", "size: [536, 520]"), "ste3.yaml", 1),
                (("512", "536"), "TRIMSEC", 3),
                (("data: TRIMSEC", "data: BIASSEC"), "BIASSEC", 3)):
            with self.subTest(change[1]), Example("ste3") as example:
                camera = example.folder / "ste3.yaml"
                text = camera.read_text()
                self.assertIn(change[0], text)
                camera.write_text(text.replace(*change))
                check = example.check(FRAME)
                self.assertEqual(check.returncode, status)
                self.assertIn(words, check.stderr)
                self.assertEqual(example.build(FRAME).returncode, 1)


class TheMosaicHeader(unittest.TestCase):
    """2048 x 4096 pixels, amplifier A on the right half, B on the left."""

    SKY, NOISE, WIDTH = 888.0, 14.3, 4.0  # ADU; SKYBRITE and SKYSIGMA of the header; pixels
    STAR = (1700.0, 2500.0)               # on A; opposite on B: 2047 - 1700

    def pixels(self):
        random = np.random.default_rng(20121124)
        image = random.normal(self.SKY, self.NOISE, (4096, 2048))
        for x, y in star_field.scattered(random, 60, 2048, 4096, 40, 40, [self.STAR]):
            star_field.add_star(image, x, y, random.uniform(1e4, 4e4), self.WIDTH, 24)
        star_field.add_star(image, *self.STAR, 5e6, self.WIDTH, 40)
        return np.minimum(np.rint(image), 57491).astype(np.uint16)  # SATURATE of the header

    def test_goes_through_check_and_build(self):
        priors = [{"stratum": "device", "mean": 0.0, "spread": 1e-3}]
        header, pixels = header_of(MOSAIC_HEADER), self.pixels()
        with Example("mosaic_ccd", priors=priors) as example:
            raw = example.folder / "mosaic.fits"
            with_pixels(header, pixels).writeto(raw, output_verify="silentfix")
            check = example.check(raw)
            self.assertEqual(check.returncode, 0, check.stderr)
            self.assertIn("MJD 56255.150985", check.stdout)
            build = example.build(raw)
            self.assertEqual(build.returncode, 0, build.stderr)
            with example.mask(raw) as mask:
                self.examine_bits(mask["S24"].data, pixels)
                self.examine_wcs(mask["S24"].header, header)
                self.assertEqual(mask[0].header["OBS_ID"], "ct4m20121124t033725")

    def examine_bits(self, bits, pixels):
        np.testing.assert_array_equal((bits & SATURATED) != 0, pixels == 57491)
        self.assertEqual(int((bits & CROSSTALK).astype(bool).sum()), 0)
        y, x = np.nonzero(bits & UNASSESSED)
        self.assertGreater(len(x), 100)
        # Read away from the middle, the amplifiers see the star at mirrored columns.
        self.assertAlmostEqual(x.mean(), 2047 - self.STAR[0], delta=1)
        self.assertAlmostEqual(y.mean(), self.STAR[1], delta=1)
        self.assertLess(np.hypot(x - x.mean(), y - y.mean()).max(), 60)

    def examine_wcs(self, found, header):
        grid = np.array([(x, y) for x in np.linspace(1, 2048, 9) for y in np.linspace(1, 4096, 9)])
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            expected = WCS(header).all_pix2world(grid, 1)
            here = WCS(found).all_pix2world(grid, 1)
        # Numbers of 17 digits on both sides: rounding alone.
        np.testing.assert_allclose(here, expected, rtol=0, atol=1e-11)
        self.assertEqual(found["CTYPE1"], "RA---TPV")
        # Of the raw header only the coordinate system goes into the mask.
        self.assertNotIn("OBJECT", found)
        self.assertEqual(found["BITPIX"], 16)

    def test_swapped_suffixes_are_refused(self):
        with Example("mosaic_ccd", priors=[{"stratum": "device", "mean": 0.0, "spread": 1e-3}]) as example:
            camera = example.folder / "mosaic_ccd.yaml"
            text = camera.read_text().replace("suffix: A", "suffix: C").replace("suffix: B", "suffix: A")
            camera.write_text(text.replace("suffix: C", "suffix: B"))
            raw = example.folder / "mosaic.fits"
            with_pixels(header_of(MOSAIC_HEADER), np.zeros((4096, 2048), np.uint16)).writeto(
                raw, output_verify="silentfix")
            check = example.check(raw)
            self.assertEqual(check.returncode, 3)
            self.assertRegex(check.stderr, r"CCDSEC[AB].*swapped")


class TheAmplifierCut(unittest.TestCase):
    def test_is_refused_for_its_sections(self):
        with Example("amplifier_21") as example:
            for result in (example.check(CUT), example.build(CUT)):
                self.assertNotEqual(result.returncode, 0)
                for words in ("DATASEC", "[25:1048,1:4096]", "400 x 400"):
                    self.assertIn(words, result.stderr)
            self.assertFalse(list((example.folder / "masks").glob("*")))

    def test_its_coordinate_system_is_refused_by_name(self):
        header = header_of(CUT)
        pixels = np.random.default_rng(21).normal(1500, 10, (4096, 1112)).astype(np.uint16)
        with Example("amplifier_21") as example:
            raw = example.folder / "whole.fits"
            with_pixels(header, pixels).writeto(raw, output_verify="silentfix")
            check = example.check(raw)
            self.assertEqual(check.returncode, 3)
            self.assertIn("TNX is not a standard projection", check.stderr)
            # Crosstalk needs no sky: the mask is made, with the pointing model's WCS, and says so.
            build = example.build(raw)
            self.assertEqual(build.returncode, 0, build.stderr)
            with example.mask(raw) as mask:
                self.assertEqual(mask["im13"].header["CTYPE1"], "RA---TAN")
                notes = " ".join(str(mask[0].header[k]) for k in mask[0].header if k.startswith("NOTE"))
                self.assertIn("TNX is not a standard projection", notes)


class TheGuide(unittest.TestCase):
    """docs/camera_from_header.md shows the files that are tested here."""

    def test_quotes_the_example_files(self):
        blocks = re.findall(r"^`([a-z0-9_]+\.(?:yaml|csv))`:\n\n```\w+\n(.*?)^```", GUIDE.read_text(),
                            re.M | re.S)
        self.assertGreaterEqual({name for name, _ in blocks},
                                {"ste3.yaml", "ste3_amplifiers.csv", "mosaic_ccd.yaml",
                                 "mosaic_ccd_amplifiers.csv", "amplifier_21.yaml"})
        for name, text in blocks:
            with self.subTest(name):
                self.assertEqual(text, (EXAMPLES / name).read_text())

    def test_values_are_those_of_the_headers(self):
        for name, path, detector, amplifiers in (
                ("ste3", FRAME, "ccd", {"gain": "GAIN", "read_noise": "RDNOISE"}),
                ("amplifier_21", CUT, "im13", {"gain": "GAIN", "read_noise": "RDNOISE",
                                               "saturation": "SATURATE"}),
                ("mosaic_ccd", MOSAIC_HEADER, "S24", {"saturation": "SATURATE"})):
            header = header_of(path)
            camera = yaml.safe_load((EXAMPLES / f"{name}.yaml").read_text())
            lines = (EXAMPLES / camera["amplifier_table"]).read_text().split()
            columns = lines[0].split(",")
            for line in lines[1:]:
                row = dict(zip(columns, line.split(",")))
                self.assertEqual(row["detector"], detector)
                for column, keyword in amplifiers.items():
                    self.assertEqual(float(row[column]), float(header[keyword]), (name, column))
            self.assertIn(str(header[camera["headers"]["filter"]]).strip(), camera["filters"])


if __name__ == "__main__":
    straymark = small_night.Straymark(sys.argv.pop(1))
    unittest.main()
