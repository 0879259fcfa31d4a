#!/usr/bin/env python3
"""clang-tidy over src/, with the checks of .clang-tidy; what was clean stays clean until it changes.

Usage: tidy.py SOURCE_ROOT BUILD_FOLDER [--analyze]. BUILD_FOLDER has compile_commands.json. Only with
--analyze are the path-sensitive checks (clang-analyzer-*) run: they nearly double the time.
"""
import concurrent.futures
import hashlib
import os
import pathlib
import subprocess
import sys

TIDY = "clang-tidy-14"


def main(root, build, *options):
    root, build = pathlib.Path(root), pathlib.Path(build)
    checks = [] if "--analyze" in options else ["--checks=-clang-analyzer-*"]
    cache = build / ("tidy_clean_analyzed" if "--analyze" in options else "tidy_clean")
    cache.mkdir(exist_ok=True)
    common = hashlib.sha256((root / ".clang-tidy").read_bytes())
    common.update(subprocess.run([TIDY, "--version"], capture_output=True, check=True).stdout)
    for header in sorted((root / "src").rglob("*.h")):
        common.update(header.read_bytes())

    def stamp_of(file):
        key = common.copy()
        key.update(file.relative_to(root).as_posix().encode() + b"\0" + file.read_bytes())
        return cache / key.hexdigest()

    def check(file):
        stamp = stamp_of(file)
        if stamp.exists():
            return ""
        result = subprocess.run(
            [TIDY, "-p", str(build), "--quiet", *checks, "--extra-arg=-Wno-unknown-warning-option", str(file)],
            capture_output=True, text=True)
        if result.returncode == 0:
            stamp.touch()
            return ""
        return result.stdout + result.stderr

    files = sorted((root / "src").rglob("*.cpp"))
    with concurrent.futures.ThreadPoolExecutor(os.cpu_count()) as pool:
        reports = [report for report in pool.map(check, files) if report]
    for report in reports:
        print(report)
    print(f"{len(files)} files, {len(reports)} with findings")
    return 1 if reports or not files else 0


if __name__ == "__main__":
    sys.exit(main(*sys.argv[1:]))
