#!/usr/bin/env python3
"""Time and memory of `build` as ratios to floors measured in the same run.

Usage: build_bench.py BUILD_FOLDER [--runs N] [--keep FOLDER]

1. One 4096 x 4096 detector of sixteen amplifiers: `straymark build` against a plain cfitsio program
   that reads the same pixels and writes the same mask (RICE_1, checksums, fsync). The two in turn.
2. Peak memory there, and for four and sixty-four detectors of 1024 x 1024.
3. Masks from digests against masks from pixels, both timed to the mask in memory.
"""
import argparse
import pathlib
import re
import shutil
import statistics
import subprocess
import sys
import tempfile
import time

sys.path.insert(0, str(pathlib.Path(__file__).resolve().parents[1] / "support"))
import scenario  # noqa: E402

ROOT = pathlib.Path(__file__).resolve().parents[2]


def run(*command, check=True):
    return subprocess.run([str(c) for c in command], check=check, capture_output=True, text=True)


def peak_mib(*command):
    result = run("/usr/bin/time", "-v", *command, check=False)
    found = re.search(r"Maximum resident set size \(kbytes\): (\d+)", result.stderr)
    return int(found.group(1)) / 1024


def make_night(straymark, folder, count, side, exposures=1):
    folder.mkdir(parents=True, exist_ok=True)
    text = scenario.scenario(count, side, ROOT / "demo_data" / "stars", exposures)
    (folder / "scenario.yaml").write_text(text, encoding="utf-8")
    night = folder / "night"
    if not night.exists():
        run(straymark, "simulate", folder / "scenario.yaml", "--out", night)
        run(straymark, "stars", "import", night / "stars.csv", "--out", night / "stars.fits")
    return night


def build(straymark, night):
    shutil.rmtree(night / "masks", ignore_errors=True)
    shutil.rmtree(night / "digests", ignore_errors=True)
    start = time.perf_counter()
    result = run(straymark, "build", "--site", night / "site.yaml", night / "raw", check=False)
    seconds = time.perf_counter() - start
    if result.returncode not in (0, 3):
        sys.exit(result.stderr)
    return seconds


def main():
    parser = argparse.ArgumentParser()
    parser.add_argument("build_folder", type=pathlib.Path)
    parser.add_argument("--runs", type=int, default=7)
    parser.add_argument("--keep", type=pathlib.Path)
    options = parser.parse_args()
    straymark = options.build_folder / "straymark"
    with tempfile.TemporaryDirectory() as temporary:
        folder = options.keep or pathlib.Path(temporary)
        night = make_night(straymark, folder / "one", 1, 4096)
        raw = next((night / "raw").glob("*.fits"))
        build(straymark, night)
        mask = next((night / "masks").glob("*.mask.fits"))
        kept = folder / "kept.mask.fits"
        shutil.copy(mask, kept)
        ratios, ours, floors = [], [], []
        for _ in range(options.runs):
            ours.append(build(straymark, night))
            start = time.perf_counter()
            out = folder / "floor.fits"
            out.unlink(missing_ok=True)
            run(options.build_folder / "tests" / "mask_floor", raw, kept, out)
            floors.append(time.perf_counter() - start)
            ratios.append(ours[-1] / floors[-1])
        print(f"build, one 4096 x 4096 detector: {1e3 * statistics.median(ours):.0f} ms; floor "
              f"{1e3 * statistics.median(floors):.0f} ms; ratio median {statistics.median(ratios):.2f} "
              f"(min {min(ratios):.2f}, max {max(ratios):.2f}; asked: at most 2)")
        shutil.rmtree(night / "masks")
        memory = peak_mib(straymark, "build", "--site", night / "site.yaml", night / "raw")
        print(f"peak memory there: {memory:.0f} MiB (asked: at most 1024)")
        in_memory = run(options.build_folder / "tests" / "mask_in_memory", night / "site.yaml", raw)
        print(in_memory.stdout.strip())
        for count in (4, 64):
            many = make_night(straymark, folder / f"many{count}", count, 1024)
            memory = peak_mib(straymark, "build", "--site", many / "site.yaml", many / "raw")
            print(f"peak memory, {count} detectors of 1024 x 1024: {memory:.0f} MiB")


if __name__ == "__main__":
    main()
