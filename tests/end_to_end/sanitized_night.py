#!/usr/bin/env python3
"""A small night from end to end by a sanitized program: any report of the sanitizer fails.

Usage: sanitized_night.py BINARY FOLDER
"""
import pathlib
import shutil
import sys

sys.path.insert(0, str(pathlib.Path(__file__).resolve().parents[1] / "support"))
import small_night  # noqa: E402


def main():
    straymark = small_night.Straymark(sys.argv[1])
    night = small_night.made_once(straymark, sys.argv[2], detectors=2, side=256, exposures=1)
    shutil.rmtree(night / "masks", ignore_errors=True)
    shutil.rmtree(night / "digests", ignore_errors=True)
    damaged = night / "damaged"
    damaged.mkdir(exist_ok=True)
    raw = sorted((night / "raw").glob("*.fits"))
    (damaged / "short.fits").write_bytes(raw[0].read_bytes()[:50000])
    steps = [
        (("check", "--site", night / "site.yaml", night / "raw"), (0,)),
        (("build", "--site", night / "site.yaml", "--threads", 4, night / "raw"), (0, 3)),
        (("build", "--site", night / "site.yaml", "--threads", 4, "--from-digests"), (0, 3)),
        (("build", "--site", night / "site.yaml", "--threads", 4, damaged, night / "raw"), (3,)),
        (("score", "--masks", night / "masks", "--truth", night / "truth", "--json"), (0, 1)),
    ]
    failures = 0
    for arguments, allowed in steps:
        result = straymark.run(*arguments)
        if result.returncode not in allowed or "Sanitizer" in result.stderr or "runtime error" in result.stderr:
            print(f"{arguments[0]}: status {result.returncode}\n{result.stderr}")
            failures += 1
    print(f"{len(steps)} commands, {failures} failed")
    return 1 if failures else 0


if __name__ == "__main__":
    sys.exit(main())
