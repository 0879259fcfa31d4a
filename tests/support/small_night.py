"""A small simulated night, made once for each version of the program, that tests copy and damage."""
import fcntl
import hashlib
import io
import os
import pathlib
import shutil
import subprocess

from astropy.io import fits

import scenario

ROOT = pathlib.Path(__file__).resolve().parents[2]


class Straymark:
    """The real program. run() never raises on an exit status: tests look at it."""

    def __init__(self, program):
        self.program = pathlib.Path(program).resolve()

    def run(self, *arguments, **options):
        command = [str(self.program), *[str(a) for a in arguments]]
        return subprocess.run(command, capture_output=True, text=True, timeout=240,
                              stdin=subprocess.DEVNULL, **options)

    def must(self, *arguments, status=(0,), **options):
        result = self.run(*arguments, **options)
        if result.returncode not in status:
            raise AssertionError(f"{arguments}: status {result.returncode}\n{result.stdout}{result.stderr}")
        return result


def made_once(straymark, folder, detectors=2, side=512, exposures=2):
    """The night in `folder`, simulated anew only when program or scenario changed."""
    folder = pathlib.Path(folder)
    folder.mkdir(parents=True, exist_ok=True)
    text = scenario.scenario(detectors, side, ROOT / "demo_data" / "stars", exposures, 0.3)
    key = hashlib.sha256(text.encode() + straymark.program.read_bytes()).hexdigest()
    with open(folder / "lock", "w", encoding="utf-8") as lock:
        fcntl.flock(lock, fcntl.LOCK_EX)  # several tests may ask for it at once
        stamp = folder / "made-by"
        if not stamp.exists() or stamp.read_text() != key:
            shutil.rmtree(folder / "night", ignore_errors=True)
            (folder / "scenario.yaml").write_text(text)
            straymark.must("simulate", folder / "scenario.yaml", "--out", folder / "night")
            straymark.must("stars", "import", folder / "night" / "stars.csv", "--out",
                           folder / "night" / "stars.fits")
            stamp.write_text(key)
    return folder / "night"


def copy_of(night, target):
    """An own copy to damage; large files are shared until replaced."""
    shutil.copytree(night, target, copy_function=os.link, dirs_exist_ok=True)
    for file in pathlib.Path(target).rglob("*"):
        if file.is_file() and file.suffix in (".yaml", ".csv"):
            own = file.read_bytes()
            file.unlink()
            file.write_bytes(own)
    return pathlib.Path(target)


def own(path):
    """Breaks the sharing of one file, so that it can be changed in place."""
    data = path.read_bytes()
    path.unlink()
    path.write_bytes(data)
    return path


def write_changed(path, change):
    """Rewrites one FITS file after change(hdus), with sums that hold, under its own name."""
    with fits.open(io.BytesIO(path.read_bytes())) as hdus:
        hdus[0].header.remove("FILESIZE", ignore_missing=True)  # astropy does not keep it
        changed = change(hdus) or hdus
        path.unlink()  # it may be shared with other copies of the night
        changed.writeto(path, checksum=True)
    return path


def set_site(night, **values):
    """Gives keys of the site file a value: set_site(night, stars="short.fits")."""
    site = night / "site.yaml"
    kept = [line for line in site.read_text().splitlines() if line.split(":")[0] not in values]
    site.write_text("\n".join(kept + [f"{key}: {value}" for key, value in values.items()]) + "\n")


def assessed(mask, predictor="crosstalk"):
    """Detector: (state, reason) of one predictor, from a mask's ASSESSED table."""
    with fits.open(mask) as hdus:
        return {row["detector"]: (row["state"], row["reason"]) for row in hdus["ASSESSED"].data
                if row["predictor"] == predictor}


def bits(mask):
    """Detector: image of bits; and the value of each bit's name, both from the file alone."""
    with fits.open(mask) as hdus:
        values = {row["name"]: int(row["value"]) for row in hdus["BITS"].data}
        return {hdu.name: hdu.data.copy() for hdu in hdus if isinstance(hdu, fits.CompImageHDU)}, values


def fraction(mask, bit):
    """Detector: fraction of its pixels with the named bit."""
    images, values = bits(mask)
    return {name: float(((image & values[bit]) != 0).mean()) for name, image in images.items()}


def hidden_files(folder):
    """What a command may have left half written."""
    folder = pathlib.Path(folder)
    return [str(f) for f in folder.rglob("*") if f.name.startswith(".") or f.name.endswith(".partial")]
