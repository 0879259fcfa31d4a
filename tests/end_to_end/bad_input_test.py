"""Bad input, one row each: what `build` is given, how it ends, what it says, what it still does.

usage: bad_input_test.py BINARY WORKFOLDER [NAME...]   (only the rows whose name holds a NAME)
"""
import json
import os
import pathlib
import resource
import shutil
import subprocess
import sys
import tempfile
import threading
from concurrent.futures import ThreadPoolExecutor

import numpy
from astropy.io import fits

ROOT = pathlib.Path(__file__).resolve().parents[2]
sys.path.insert(0, str(ROOT / "tests" / "support"))
import small_night  # noqa: E402

DONE, FAILED, WRONG_USE, INCOMPLETE = 0, 1, 2, 3
FIRST, SECOND = "bench-0001", "bench-0002"
HOSTILE = ROOT / "tests" / "fault" / "hostile"
ROWS = []


def row(name, status, says=(), masks=(SECOND,), **checks):
    """Registers a function that damages a night and may return the raw arguments, as one row.

    says: words that standard error must hold. masks: exposures that must have a mask, no other may.
    checks: whole / part / off / silent, a list of masks each (see `judge`).
    """
    def register(damage):
        ROWS.append((name, damage, status, says, masks, checks))
        return damage
    return register


def raw(night, exposure=FIRST):
    return night / "raw" / f"{exposure}.fits"


def header(night, **cards):
    """Sets cards of the first exposure's primary header; None removes one."""
    def change(hdus):
        for keyword, value in cards.items():
            keyword = keyword.replace("MJD_", "MJD-")
            if value is None:
                del hdus[0].header[keyword]
            else:
                hdus[0].header[keyword] = value
    small_night.write_changed(raw(night), change)


def pixels(night, detector, value, dtype=None):
    """Gives all pixels of the first exposure's detector one value."""
    def change(hdus):
        for i, hdu in enumerate(hdus):
            if hdu.name.lower().startswith(detector + "_"):
                data = numpy.full(hdu.data.shape, value, dtype or hdu.data.dtype)
                cards = [hdu.header.cards[k] for k in ("EXTNAME", "DATASEC", "BIASSEC", "PRESEC", "DETSEC")]
                hdus[i] = fits.ImageHDU(data, fits.Header(cards))
    small_night.write_changed(raw(night), change)


def replace(file, old, new):
    text = file.read_text()
    assert old in text, f"{file.name}: no {old!r}"
    file.write_text(text.replace(old, new, 1))


# Files ---------------------------------------------------------------------------------------

@row("a file that does not exist", INCOMPLETE, ["nowhere.fits", "No such file", "check the name"])
def _(night):
    return [night / "raw" / "nowhere.fits", raw(night, SECOND)]


@row("nothing but a file that does not exist", FAILED, ["nowhere.fits", "check the name"], masks=())
def _(night):
    return [night / "raw" / "nowhere.fits"]


@row("a folder without FITS files", WRONG_USE, ["empty", "expected raw exposures"], masks=())
def _(night):
    (night / "empty").mkdir()
    return [night / "empty"]


@row("a named pipe", INCOMPLETE, ["pipe.fits", "regular file"])
def _(night):
    os.mkfifo(night / "raw" / "pipe.fits")
    raw(night).unlink()


@row("a file that may not be FITS at all", INCOMPLETE, ["bench-0001.fits", "expected"])
def _(night):
    raw(night).unlink()
    raw(night).write_text("not FITS\n" * 1000)


@row("an empty file", INCOMPLETE, ["bench-0001.fits", "0 bytes", "2880"])
def _(night):
    raw(night).unlink()
    raw(night).write_bytes(b"")


for kept in (0.01, 0.3, 0.999):
    @row(f"a file truncated to {kept:.1%}", INCOMPLETE, ["bench-0001.fits", "truncated", "fetch"])
    def _(night, kept=kept):
        data = raw(night).read_bytes()
        raw(night).unlink()
        raw(night).write_bytes(data[:int(len(data) * kept)])


# Headers -------------------------------------------------------------------------------------

@row("no start time", INCOMPLETE, ["bench-0001.fits", "MJD-OBS", "no such card", "check `headers`"])
def _(night):
    header(night, MJD_OBS=None)


@row("a start time that is a word", INCOMPLETE, ["bench-0001.fits", "HDU 0", "MJD-OBS", "yesterday", "instant"])
def _(night):
    header(night, MJD_OBS="yesterday")


@row("a Julian date for a Modified one", INCOMPLETE, ["MJD-OBS", "2461426.68", "Modified"])
def _(night):
    header(night, MJD_OBS=2461426.68)


@row("pointing NaN as text", INCOMPLETE, ["bench-0001.fits", "RA", "NaN", "degrees"])
def _(night):
    header(night, RA="NaN")


@row("pointing NaN as a bare word, which FITS does not know", INCOMPLETE, ["bench-0001.fits", "DEC", "degrees"])
def _(night):
    data = raw(night).read_bytes()
    raw(night).unlink()
    card = data.index(b"DEC     = ")
    raw(night).write_bytes(data[:card] + b"DEC     =                  NaN".ljust(80) + data[card + 80:])


@row("an unknown filter", INCOMPLETE, ["bench-0001.fits", "FILTER", "'narrow'", "add the filter"])
def _(night):
    header(night, FILTER="narrow")


@row("a negative exposure time", INCOMPLETE, ["EXPTIME", "-30", "seconds"])
def _(night):
    header(night, EXPTIME=-30.0)


@row("no identifier", INCOMPLETE, ["OBS_ID", "identifier"])
def _(night):
    header(night, OBS_ID=None)


@row("a type that the camera file does not list", INCOMPLETE, [FIRST, "'SKYFLAT'", "types"])
def _(night):
    header(night, IMAGETYP="SKYFLAT")


for kind in ("FLAT", "DARK", "FOCUS"):
    @row(f"a {kind.lower()} among the exposures", DONE)
    def _(night, kind=kind):
        header(night, IMAGETYP=kind, RA=None, FILTER=None)


# Structure -----------------------------------------------------------------------------------

@row("another size than the camera file says", INCOMPLETE, ["bench-0001.fits", "d1_a03"])
def _(night):
    def change(hdus):
        hdus["d1_a03"].data = hdus["d1_a03"].data[:200].copy()
    small_night.write_changed(raw(night), change)


@row("a prescan that the camera file does not have", INCOMPLETE, ["d1_a03", "PRESEC"])
def _(night):
    def change(hdus):
        hdus["d1_a03"].header["PRESEC"] = "[1:6,1:256]"
    small_night.write_changed(raw(night), change)


@row("sections outside the image", INCOMPLETE, ["d1_a03", "DATASEC", "[9:720,1:256]"])
def _(night):
    def change(hdus):
        hdus["d1_a03"].header["DATASEC"] = "[9:720,1:256]"
    small_night.write_changed(raw(night), change)


@row("two HDUs swapped", INCOMPLETE, ["bench-0001.fits", "DETSEC"])
def _(night):
    def change(hdus):
        hdus["d1_a03"].name, hdus["d1_a04"].name = "other", "d1_a03"
        hdus["other"].name = "d1_a04"
    small_night.write_changed(raw(night), change)


@row("one HDU twice", INCOMPLETE, ["bench-0001.fits", "d1_a03"])
def _(night):
    small_night.write_changed(raw(night), lambda hdus: fits.HDUList([*hdus, hdus["d1_a03"].copy()]))


@row("an extra HDU", DONE, masks=(FIRST, SECOND), notes=["guider", "does not know"], silent=[FIRST])
def _(night):
    extra = fits.ImageHDU(numpy.zeros((8, 8), numpy.int16), name="guider")
    small_night.write_changed(raw(night), lambda hdus: fits.HDUList([*hdus, extra]))


@row("an amplifier's HDU missing", INCOMPLETE, ["unassessed"], masks=(FIRST, SECOND),
     notes=["d1/a03"], part=[FIRST], silent=[SECOND])
def _(night):
    def change(hdus):
        del hdus["d1_a03"]
    small_night.write_changed(raw(night), change)


@row("a detector's HDUs missing", INCOMPLETE, ["unassessed"], masks=(FIRST, SECOND), part=[FIRST], silent=[SECOND])
def _(night):
    small_night.write_changed(raw(night), lambda hdus: fits.HDUList(
        [hdu.copy() for hdu in hdus if not hdu.name.lower().startswith("d2_")]))


@row("fewer amplifiers than the camera file: none of its HDUs", INCOMPLETE, ["bench-0001.fits", "HDUs named like"])
def _(night):
    small_night.write_changed(raw(night), lambda hdus: fits.HDUList([hdus[0].copy()]))


# Pixels --------------------------------------------------------------------------------------

for what, value, dtype in (("saturated", 65535, None), ("zero", 0, None), ("NaN", numpy.nan, numpy.float32)):
    @row(f"a detector all {what}", INCOMPLETE, ["unassessed"], masks=(FIRST, SECOND), part=[FIRST], silent=[SECOND])
    def _(night, value=value, dtype=dtype):
        pixels(night, "d2", value, dtype)


@row("a dead amplifier", DONE, masks=(FIRST, SECOND), defect=[FIRST, SECOND])
def _(night):
    replace(night / "bench.yaml", 'board: "b1", role: science}',
            'board: "b1", role: science, amplifiers: {a03: {status: dead}}}')


@row("a guide detector", DONE, masks=(FIRST, SECOND), only_d2=[FIRST, SECOND])
def _(night):
    replace(night / "bench.yaml", "role: science", "role: guide")


# Stars: positions are then the header's, which the mask says; crosstalk needs none. ------------

def star_list(night, rows, *options):
    (night / "few.csv").write_text("id,ra,dec,mag,epoch\n" + "".join(rows))
    STRAYMARK.must("stars", "import", night / "few.csv", "--out", night / "few.fits", *options)
    small_night.set_site(night, stars="few.fits")


@row("a star list that is missing", DONE, ["none.fits"], masks=(FIRST, SECOND),
     unrefined=[FIRST, SECOND], echoes=[FIRST, SECOND])
def _(night):
    small_night.set_site(night, stars="none.fits")


@row("a star list with no rows here", DONE, masks=(FIRST, SECOND), unrefined=[FIRST, SECOND], echoes=[FIRST, SECOND])
def _(night):
    star_list(night, [f"s{i},{10 + 0.01 * (i % 40)},{-40 + 0.01 * (i // 40)},15,2000\n" for i in range(1600)])


@row("a star list that stops short of the detectors", DONE, masks=(FIRST, SECOND),
     unrefined=[FIRST, SECOND], echoes=[FIRST, SECOND])
def _(night):
    lines = (night / "stars.csv").read_text().splitlines(keepends=True)[1:]
    star_list(night, [line for line in lines if float(line.split(",")[2]) > 28.1])


@row("a damaged star list", DONE, ["stars.fits"], masks=(FIRST, SECOND), unrefined=[FIRST], echoes=[FIRST])
def _(night):
    data = small_night.own(night / "stars.fits").read_bytes()
    (night / "stars.fits").write_bytes(data[:len(data) // 2])


# Products ------------------------------------------------------------------------------------

def product(night, **cards):
    def change(hdus):
        for keyword, value in cards.items():
            hdus[0].header[keyword] = value
    small_night.write_changed(night / "calib" / "crosstalk.fits", change)


for what, cards in (("camera", {"CAMERA": "other"}), ("read-out mode", {"MODE": "fast"}),
                    ("filter", {"FILTER": "g"}), ("date", {"MJDTO": 61400.0})):
    @row(f"a product of another {what}", INCOMPLETE, ["unassessed", "ASSESSED"],
         masks=(FIRST, SECOND), whole=[FIRST, SECOND])
    def _(night, cards=cards):
        product(night, **cards)


@row("a product that ends between two exposures", INCOMPLETE, [SECOND, "unassessed"], masks=(FIRST, SECOND),
     silent=[FIRST], whole=[SECOND])
def _(night):
    product(night, MJDTO=61426.1805)


@row("no product at all", INCOMPLETE, ["unassessed"], masks=(FIRST, SECOND), whole=[FIRST, SECOND])
def _(night):
    (night / "calib" / "crosstalk.fits").unlink()


@row("two products in force", FAILED, ["two crosstalk products", "crosstalk.fits", "again.fits", "retire"], masks=())
def _(night):
    shutil.copy(night / "calib" / "crosstalk.fits", night / "calib" / "again.fits")


@row("a damaged product", FAILED, ["crosstalk.fits"], masks=())
def _(night):
    data = bytearray(small_night.own(night / "calib" / "crosstalk.fits").read_bytes())
    data[len(data) // 2] ^= 255
    (night / "calib" / "crosstalk.fits").write_bytes(data)


@row("a product that names an amplifier the camera does not have", FAILED, ["crosstalk.fits", "d9/a03"], masks=())
def _(night):
    def change(hdus):
        hdus["PAIRS"].data["source"][4] = "d9/a03"
    small_night.write_changed(night / "calib" / "crosstalk.fits", change)


@row("a folder of products that does not exist", FAILED, ["nowhere", "calibrations"], masks=())
def _(night):
    small_night.set_site(night, calibrations="nowhere/")


# Names and doubles ---------------------------------------------------------------------------

@row("names with spaces, brackets, bars, a leading dash", DONE,
     masks=("-a b[1] |cat", "http:%2F{x}#$(y)"), silent=["-a b[1] |cat"])
def _(night):
    raw(night).rename(night / "raw" / "-a b[1] |cat.fits")
    raw(night, SECOND).rename(night / "raw" / "http:%2F{x}#$(y).fits")


@row("a name with a leading dash, given alone after --", DONE, masks=("-x",), cwd="raw")
def _(night):
    raw(night).rename(night / "raw" / "-x.fits")
    return ["--", "-x.fits"]


@row("the same exposure twice, the same bytes", DONE, ["left out", "the same bytes"], masks=(FIRST, SECOND))
def _(night):
    shutil.copy(raw(night), night / "raw" / "copy.fits")


@row("the same exposure twice, with different content", INCOMPLETE,
     [FIRST, "other.fits", "two different contents", "keep the right file"])
def _(night):
    shutil.copy(raw(night), night / "raw" / "other.fits")
    header(night, CCDTEMP=-99.0)


@row("two files of one name", INCOMPLETE, ["2 files of this name", "rename"])
def _(night):
    (night / "more").mkdir()
    shutil.copy(raw(night), night / "more" / "bench-0001.fits")
    return [night / "raw", night / "more"]


@row("two exposures whose masks would have one name", INCOMPLETE, ["bench-0001.fit", "rename", "mask"])
def _(night):
    shutil.copy(raw(night), night / "raw" / "bench-0001.fit")
    small_night.write_changed(night / "raw" / "bench-0001.fit",
                              lambda hdus: hdus[0].header.set("OBS_ID", "another"))


# YAML ----------------------------------------------------------------------------------------

for what, file, old, new, says in (
        ("an unknown key", "site.yaml", "stars:", "starz:", ["line 5", "starz", "stars"]),
        ("a duplicate key", "site.yaml", "history:", "stars: x\nhistory:", ["second time", "line"]),
        ("a mistyped value", "site.yaml", "0.02", "lots", ["unassessed_fraction", "lots"]),
        ("a value out of range", "site.yaml", "0.02", "2", ["unassessed_fraction", "at most 1"]),
        ("a number that is not one", "site.yaml", "0.02", ".nan", ["unassessed_fraction"]),
        ("an alias", "site.yaml", "stars: stars.fits", "x_s: &s stars.fits\nstars: *s", ["anchor", "line"]),
        ("deep nesting", "site.yaml", "{unassessed_fraction: 0.02}", "[" * 5000, ["site.yaml", "line"]),
        ("another format", "site.yaml", "site/1", "site/2", ["site.yaml", "straymark-site/1"]),
        ("bytes that are no text", "site.yaml", "# The", "\x00", ["site.yaml"]),
        ("a camera in other units", "bench.yaml", "aperture_mm: 2300", "aperture_mm: 2.3", ["bench.yaml", "aperture_mm"]),
        ("a camera in other units by name", "bench.yaml", "aperture_mm: 2300", "aperture_m: 2.3",
         ["bench.yaml", "aperture_m", "aperture_mm"]),
        ("a centre in pixels", "bench.yaml", "[-4.09, -4.09]", "[4.09, -4.0]", ["bench.yaml", "centre_mm"]),
        ("an amplifier section that overlaps", "bench.yaml", "[65, 128, 1, 256]", "[64, 128, 1, 256]", ["bench.yaml", "a0"]),
        ("a table row missing", "bench_amplifiers.csv", "d1,a03,", "# d1,a03,", ["bench_amplifiers.csv", "d1", "a03"]),
        ("a table cell that is a word", "bench_amplifiers.csv", "1.448083", "much", ["bench_amplifiers.csv", "gain", "much"]),
        ("a pair that does not exist", "bench_pairs.csv", "d1/a15", "d1/a99", ["bench_pairs.csv", "d1/a99"])):
    @row(f"YAML and CSV: {what}", FAILED, says, masks=())
    def _(night, file=file, old=old, new=new):
        replace(night / file, old, new)


@row("no site file", FAILED, ["site.yaml", "No such file"], masks=())
def _(night):
    (night / "site.yaml").unlink()


@row("a command line without a site", WRONG_USE, ["--site"], masks=(), bare=True)
def _(night):
    return ["build", night / "raw"]


@row("an option that does not exist", WRONG_USE, ["--fast"], masks=(), bare=True)
def _(night):
    return ["build", "--site", night / "site.yaml", "--fast", night / "raw"]


@row("no command", WRONG_USE, [], masks=(), bare=True)
def _(night):
    return []


# Hostile files: as raw exposures, and as everything else a site names ------------------------

for hostile in sorted(HOSTILE.glob("*.fits*")) + sorted(HOSTILE.glob("*.hdr")):
    @row(f"hostile raw file {hostile.name}", INCOMPLETE, [hostile.name], memory=True)
    def _(night, hostile=hostile):
        return [hostile, raw(night, SECOND)]

    @row(f"hostile product {hostile.name}", FAILED, ["hostile.fits"], masks=(), memory=True)
    def _(night, hostile=hostile):
        shutil.copy(hostile, night / "calib" / "hostile.fits")

    @row(f"hostile star list {hostile.name}", DONE, [hostile.name], masks=(FIRST, SECOND),
         unrefined=[FIRST], memory=True)
    def _(night, hostile=hostile):
        small_night.set_site(night, stars=hostile)

    @row(f"hostile camera file {hostile.name}", FAILED, [hostile.name], masks=(), memory=True)
    def _(night, hostile=hostile):
        small_night.set_site(night, camera=hostile)


@row("damaged pixels under this camera's own names", INCOMPLETE, ["bench-0001.fits", "d1_a01"], memory=True)
def _(night):
    damaged = HOSTILE / "rice_int_segv.fits"
    with fits.open(damaged, disable_image_compression=True) as hdus:
        block = fits.BinTableHDU(hdus[1].data, hdus[1].header, name="d1_a01")
        small_night.write_changed(raw(night), lambda raws: fits.HDUList(
            [raws[0].copy(), block, *[hdu.copy() for hdu in raws[2:]]]))


# What the rows are judged by -----------------------------------------------------------------

def judge(night, result, status, says, masks, checks):
    """Everything wrong with how the command ended, as sentences."""
    wrong = []

    def demand(truth, text):
        if not truth:
            wrong.append(text)

    demand(result.returncode == status, f"exit status {result.returncode}, not {status}")
    for words in says:
        demand(words.lower() in result.stderr.lower(), f"standard error does not say {words!r}")
    for line in result.stderr.splitlines() if "bare" not in checks else ():
        demand(line.startswith("straymark: ") or line.startswith("  "), f"a line of another kind: {line!r}")
    made = {file.name.removesuffix(".mask.fits") for file in (night / "masks").glob("*")}
    demand(made == set(masks), f"masks {sorted(made)}, not {sorted(masks)}")
    for folder in ("masks", "digests"):
        demand(not small_night.hidden_files(night / folder), f"left behind: {small_night.hidden_files(night / folder)}")
    report = json.loads(result.stdout) if result.stdout else {"exposures": [], "skipped": []}
    said = json.dumps(report)
    for words in checks.get("notes", ()):
        demand(words in said.lower(), f"the report does not say {words!r}")
    wrong += [f"{name}: {text}" for kind in JUDGES for name in checks.get(kind, ())
              for text in JUDGES[kind](night / "masks" / f"{name}.mask.fits")]
    return wrong


def silent(mask):
    """All was known: nothing unassessed."""
    if any(small_night.fraction(mask, "crosstalk_unassessed").values()):
        yield "unassessed pixels though nothing was missing"
    if {state for state, _ in small_night.assessed(mask).values()} != {"assessed"}:
        yield "ASSESSED is not 'assessed'"


def whole(mask):
    """The predictor could not look anywhere: every pixel says so."""
    if set(small_night.fraction(mask, "crosstalk_unassessed").values()) != {1.0}:
        yield "not every pixel is crosstalk_unassessed"
    if any(state != "unassessed" or not reason for state, reason in small_night.assessed(mask).values()):
        yield "ASSESSED does not say 'unassessed' and why"


def part(mask):
    """The predictor could not look everywhere: some pixels say so, and ASSESSED says why."""
    if not any(small_night.fraction(mask, "crosstalk_unassessed").values()):
        yield "silently zero: no pixel is crosstalk_unassessed"
    if not any(state in ("partly", "unassessed") and reason
               for state, reason in small_night.assessed(mask).values()):
        yield "ASSESSED does not say 'partly' or 'unassessed' and why"


def defect(mask):
    """The dead amplifier d1/a03, and it alone, is a defect."""
    images, values = small_night.bits(mask)
    expected = numpy.zeros(images["d1"].shape, bool)
    expected[0:256, 128:192] = True  # section [129, 192, 1, 256] of the camera file
    if not numpy.array_equal((images["d1"] & values["defect"]) != 0, expected):
        yield "the dead amplifier's pixels are not those marked as a defect"


def only_d2(mask):
    """A guide detector gets no mask; what it leaks is still predicted."""
    images, values = small_night.bits(mask)
    if set(images) != {"d2"}:
        yield f"images {sorted(images)}"
    with fits.open(mask) as hdus:
        if not any(source.startswith("d1/") for source in hdus["MARKS"].data["source"]):
            yield "no echo of the guide detector"


def unrefined(mask):
    """The mask says that its coordinates are the header's, and why."""
    text = fits.getheader(mask)["POINTING"]
    if not text.startswith("from the header: ") or len(text) < 25:
        yield f"POINTING is {text!r}"


def echoes(mask):
    """Crosstalk does not need stars: echoes are flagged and nothing is unassessed."""
    if not any(small_night.fraction(mask, "crosstalk_positive").values()):
        yield "no echo flagged"
    yield from silent(mask)


JUDGES = {check.__name__: check for check in (silent, whole, part, defect, only_d2, unrefined, echoes)}

# Enough for this night many times over, and less than what a bomb expands to.
MEMORY_LIMIT = 400 << 20


def limits(memory):
    if memory:
        resource.setrlimit(resource.RLIMIT_DATA, (MEMORY_LIMIT, MEMORY_LIMIT))


def run_row(night, damage, checks):
    given = damage(night) or [night / "raw"]
    command = given if "bare" in checks else ["build", "--site", night / "site.yaml", "--json", "--threads", 1, *given]
    return STRAYMARK.run(*command, cwd=night / checks.get("cwd", "."),
                         preexec_fn=lambda: limits("memory" in checks))


# Cases that need something to go on meanwhile ------------------------------------------------

def growing_file(night):
    """A file that grows while it is read is refused; the writer may pause, hence more than one try."""
    small_night.own(raw(night))
    stop = threading.Event()

    def grow():
        with open(raw(night), "ab", buffering=0) as file:
            while not stop.is_set():
                file.write(b"\0")

    writer = threading.Thread(target=grow)
    writer.start()
    try:
        for _ in range(20):
            result = STRAYMARK.run("build", "--site", night / "site.yaml", "--json", night / "raw")
            if "still growing" in result.stderr:
                break
            shutil.rmtree(night / "masks")
    finally:
        stop.set()
        writer.join()
    return judge(night, result, INCOMPLETE, ["bench-0001.fits", "still growing", "wait"], (SECOND,), {})


def limited_disk(night):
    """No file may grow beyond 100,000 bytes: digests do not fit. The signal is left as it comes."""
    limit = 100_000
    result = STRAYMARK.run("build", "--site", night / "site.yaml", "--json", night / "raw",
                           preexec_fn=lambda: resource.setrlimit(resource.RLIMIT_FSIZE, (limit, limit)))
    return judge(night, result, FAILED, ["bench-0001.digest.fits", "write", "File too large"], (), {})


def full_disk(night):
    """A file system of 400 kB: the first exposure fits, the second does not; then there is room."""
    mounted = night / "small"
    mounted.mkdir()
    build = ["build", "--site", night / "site.yaml", "--json", night / "raw"]
    if subprocess.run(["mount", "-t", "tmpfs", "-o", "size=400k", "tmpfs", mounted], capture_output=True).returncode:
        print("  not tried: no file system may be mounted here")
        return []
    try:
        small_night.set_site(night, masks="small/masks/", digests="small/digests/")
        result = STRAYMARK.run(*build)
        wrong = judge(night / "small", result, INCOMPLETE, [SECOND, "No space left"], (FIRST,), {"silent": [FIRST]})
        subprocess.run(["mount", "-o", "remount,size=4m", mounted], check=True)
        again = STRAYMARK.run(*build)
        return wrong + judge(night / "small", again, DONE, [], (FIRST, SECOND), {"silent": [SECOND]})
    finally:
        subprocess.run(["umount", mounted], check=True)


def lost_report(night):
    """A report that cannot be written is not 'done'."""
    with open("/dev/full", "w") as full:
        result = subprocess.run([STRAYMARK.program, "build", "--site", night / "site.yaml", "--json", night / "raw"],
                                stdout=full, stderr=subprocess.PIPE, text=True)
    return [] if result.returncode == FAILED and "standard output" in result.stderr else \
        [f"exit status {result.returncode}, {result.stderr!r}"]


def reader_gone(night):
    """Whoever reads the report goes away: the masks are made all the same."""
    reading, writing = os.pipe()
    os.close(reading)
    result = subprocess.run([STRAYMARK.program, "build", "--site", night / "site.yaml", "--json", night / "raw"],
                            stdout=writing, stderr=subprocess.PIPE, text=True)
    os.close(writing)
    made = sorted(f.name for f in (night / "masks").glob("*"))
    return [] if result.returncode == FAILED and len(made) == 2 else [f"exit status {result.returncode}, masks {made}"]


def empty_star_list(night):
    """A table without stars is refused by `stars import`, with nothing written."""
    (night / "none.csv").write_text("id,ra,dec,mag\n")
    result = STRAYMARK.run("stars", "import", night / "none.csv", "--out", night / "none.fits")
    wrong = [] if result.returncode == FAILED and "none.csv" in result.stderr and "no stars" in result.stderr else \
        [f"exit status {result.returncode}, {result.stderr!r}"]
    return wrong + [f"left: {f.name}" for f in night.iterdir() if "none.fits" in f.name]


def no_permission(night):
    """Masks where nothing can be made: a file stands in the folder's place."""
    (night / "masks").write_text("in the way")
    result = STRAYMARK.run("build", "--site", night / "site.yaml", "--json", night / "raw")
    text = (night / "masks").read_text()
    (night / "masks").unlink()
    wrong = judge(night, result, FAILED, [str(night / "masks"), "create folder"], (), {})
    return wrong + ([] if text == "in the way" else ["the file in the way was changed"])


SCENES = [growing_file, limited_disk, full_disk, lost_report, reader_gone, empty_star_list,
          no_permission]


def problems_of(scene, copy):
    """Runs one row or scene on its own copy of the night."""
    small_night.copy_of(NIGHT, copy)
    for folder in ("masks", "digests", "truth"):
        shutil.rmtree(copy / folder, ignore_errors=True)
    problems = scene(copy)
    shutil.rmtree(copy)
    return problems


def row_problems(copy, damage, status, says, masks, checks):
    result = run_row(copy, damage, checks)
    problems = judge(copy, result, status, says, masks, checks)
    return problems + [f"it said: {result.stderr.strip()}"] if problems else []


def main(program, work, *wanted):
    global STRAYMARK, NIGHT
    STRAYMARK = small_night.Straymark(program)
    work = pathlib.Path(work).resolve()
    NIGHT = small_night.made_once(STRAYMARK, work / "made")
    jobs = [(name, lambda copy, rest=rest: row_problems(copy, *rest)) for name, *rest in ROWS]
    jobs += [(scene.__doc__.split(".")[0], scene) for scene in SCENES]
    jobs = [job for job in jobs if not wanted or any(word in job[0] for word in wanted)]
    failures = 0
    with tempfile.TemporaryDirectory(dir=work) as cases, ThreadPoolExecutor(2) as pool:
        results = [(name, pool.submit(problems_of, scene, pathlib.Path(cases) / f"case{i}"))
                   for i, (name, scene) in enumerate(jobs)]
        for name, result in results:
            problems = result.result() if not result.exception() else [repr(result.exception())]
            failures += bool(problems)
            for problem in problems:
                print(f"FAILED: {name}: {problem}", flush=True)
    print(f"{len(jobs) - failures} of {len(jobs)} as they should be")
    return 1 if failures or not jobs else 0


if __name__ == "__main__":
    sys.exit(main(*sys.argv[1:]))
