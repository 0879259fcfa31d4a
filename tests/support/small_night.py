"""A small simulated night, made once for each version of the program, that tests copy and damage."""
import fcntl
import hashlib
import os
import pathlib
import shutil
import subprocess

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
