#!/usr/bin/env python3
"""A small simulated night, built, against the dense sum over all pairs in numpy.

Usage: dense_crosstalk_test.py PROGRAM FOLDER. FOLDER keeps the night between runs.
"""
import pathlib
import shutil
import subprocess
import sys
import tempfile

ROOT = pathlib.Path(__file__).resolve().parents[2]
sys.path.insert(0, str(ROOT / "tests" / "support"))
import small_night  # noqa: E402

REFERENCE = ROOT / "tests" / "reference" / "dense_crosstalk" / "dense_crosstalk.py"


def main():
    straymark = small_night.Straymark(sys.argv[1])
    night = small_night.made_once(straymark, sys.argv[2])
    with tempfile.TemporaryDirectory(prefix="straymark-dense-", dir=sys.argv[2]) as folder:
        own = small_night.copy_of(night, pathlib.Path(folder) / "night")
        for made in ("masks", "digests"):
            shutil.rmtree(own / made, ignore_errors=True)
        straymark.must("build", "--site", own / "site.yaml", own / "raw")
        return subprocess.run([sys.executable, str(REFERENCE), str(own)], check=False).returncode


if __name__ == "__main__":
    sys.exit(main())
