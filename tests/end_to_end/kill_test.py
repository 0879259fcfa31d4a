"""`build`, killed at random moments and run again, ends with the bytes of an undisturbed run.

usage: kill_test.py BINARY WORKFOLDER
"""
import pathlib
import random
import shutil
import signal
import subprocess
import sys
import tempfile
import time

ROOT = pathlib.Path(__file__).resolve().parents[2]
sys.path.insert(0, str(ROOT / "tests" / "support"))
import small_night  # noqa: E402

KILLS = 10
SEED = 20


def results(night):
    return {str(file.relative_to(night)): file.read_bytes()
            for folder in ("masks", "digests") if (night / folder).exists()
            for file in sorted((night / folder).iterdir()) if not file.name.startswith(".")}


def clear(night):
    for folder in ("masks", "digests"):
        shutil.rmtree(night / folder, ignore_errors=True)


def main(program, work):
    straymark = small_night.Straymark(program)
    made = small_night.made_once(straymark, pathlib.Path(work).resolve() / "made")
    moments = random.Random(SEED)
    wrong = []
    with tempfile.TemporaryDirectory(dir=work) as folder:
        night = small_night.copy_of(made, pathlib.Path(folder) / "night")
        clear(night)
        build = ["build", "--site", night / "site.yaml", "--threads", "2", night / "raw"]
        began = time.monotonic()
        straymark.must(*build)
        whole_s = time.monotonic() - began
        undisturbed = results(night)
        killed = 0
        clear(night)
        for attempt in range(KILLS):
            after_s = moments.uniform(0.0, whole_s)
            process = subprocess.Popen([straymark.program, *build], stdout=subprocess.DEVNULL,
                                       stderr=subprocess.DEVNULL)
            time.sleep(after_s)
            process.send_signal(signal.SIGKILL)
            killed += process.wait() == -signal.SIGKILL
            half = {name for name, data in results(night).items() if undisturbed.get(name) != data}
            if half:
                wrong.append(f"killed after {after_s:.3f} s: {sorted(half)} differ from an undisturbed run")
            if attempt % 2:  # every other time the next run goes on from where this one died
                straymark.must(*build)
                if results(night) != undisturbed:
                    wrong.append(f"run again after {after_s:.3f} s: not the bytes of an undisturbed run")
                if small_night.hidden_files(night):
                    wrong.append(f"left behind: {small_night.hidden_files(night)}")
                clear(night)
        if killed == 0:
            wrong.append("every run ended before it was killed: nothing was tested")
    for problem in wrong:
        print(f"FAILED: {problem}")
    return 1 if wrong else 0


if __name__ == "__main__":
    sys.exit(main(*sys.argv[1:]))
