#!/usr/bin/env python3
"""The include rule must see what is planted: each forbidden include, and no allowed one."""
import pathlib
import subprocess
import sys
import tempfile

RULE = pathlib.Path(__file__).with_name("include_rule.py")
PLANTED = {
    "core/a.h": ('#include "camera/camera.h"', False),
    "mask/a.cpp": ('#include "core/error.h"\n#include "artifacts/mark.h"', True),
    "artifacts/ghost/a.cpp": ('#include "artifacts/spike/model.h"', False),
    "artifacts/registry.cpp": ('#include "artifacts/spike/predict.h"', True),
    "simulate/a.cpp": ('#include "camera/readout.h"', False),
    "score/a.cpp": ('#include "mask/bits.h"', False),
    "night/a.cpp": ("#include <fitsio.h>", False),
    "io/a.cpp": ("#include <fitsio.h>", True),
    "exposure/a.cpp": ("#  include <wcs.h>", False),
    "elsewhere/a.cpp": ("", False),
}


def main():
    wrong = 0
    for name, (text, allowed) in PLANTED.items():
        with tempfile.TemporaryDirectory() as root:
            file = pathlib.Path(root) / "src" / name
            file.parent.mkdir(parents=True)
            file.write_text(text + "\n", encoding="utf-8")
            status = subprocess.run([sys.executable, RULE, root], capture_output=True).returncode
            if (status == 0) != allowed:
                print(f"{name}: {text!r} judged wrongly")
                wrong += 1
    print(f"{len(PLANTED)} planted, {wrong} judged wrongly")
    return 1 if wrong else 0


if __name__ == "__main__":
    sys.exit(main())
