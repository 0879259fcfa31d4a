#!/usr/bin/env python3
"""Holds every #include in src/ against the table of rooms in docs/architecture.md.

Usage: include_rule.py SOURCE_ROOT. Prints each forbidden include; exit status 1 if there is any.
"""
import pathlib
import re
import sys

# Room -> rooms it may include besides itself (each with what those may include).
ALLOWED = {
    "core": [],
    "raster": ["core"],
    "camera": ["core"],
    "sky": ["camera"],
    "exposure": ["sky", "raster"],
    "history": ["exposure"],
    "fitting": ["core"],
    "artifacts": ["exposure", "history", "fitting", "raster"],
    "artifacts/crosstalk": ["artifacts"],
    "artifacts/ghost": ["artifacts"],
    "artifacts/spike": ["artifacts"],
    "artifacts/persistence": ["artifacts"],
    "mask": ["artifacts"],
    "night": ["mask", "history"],
    "review": ["mask"],
    "campaign": ["artifacts"],
    "simulate": ["core"],
    "score": ["core"],
    "io": ["night", "review", "campaign", "simulate", "score"],
    "cli": ["io"],
}
# The simulator uses core's units, random numbers and errors, and the score none of the predictors.
LIBRARIES = {
    "fitsio.h": {"io"}, "yaml-cpp/": {"io"}, "nlohmann/": {"io"}, "sqlite3.h": {"io"}, "expat.h": {"io"},
    "png.h": {"io"}, "erfa.h": {"sky"}, "wcs": {"sky"}, "CLI/": {"cli"}, "tbb/": {"core"},
}
INCLUDE = re.compile(r'^\s*#\s*include\s*(["<])([^">]+)[">]', re.M)


def closure(room):
    seen, todo = {room}, [room]
    while todo:
        for other in ALLOWED[todo.pop()]:
            if other not in seen:
                seen.add(other)
                todo.append(other)
    return seen


def room_of(path):
    parts = path.split("/")
    nested = "/".join(parts[:2])
    return nested if nested in ALLOWED else parts[0]


def main(root):
    source = pathlib.Path(root) / "src"
    faults, files = [], 0
    for file in sorted([*source.rglob("*.h"), *source.rglob("*.cpp")]):
        name = file.relative_to(source).as_posix()
        room = room_of(name)
        if room not in ALLOWED:
            faults.append(f"{name}: no such room in the table")
            continue
        files += 1
        may = closure(room)
        for quote, target in INCLUDE.findall(file.read_text(encoding="utf-8")):
            if quote == '"':
                other = room_of(target)
                # The registry is the one list that names every artifact.
                registry = name == "artifacts/registry.cpp" and other.startswith("artifacts/")
                if other not in may and not registry:
                    faults.append(f"{name}: room '{room}' must not include \"{target}\"")
            else:
                for library, rooms in LIBRARIES.items():
                    if target.startswith(library) and room not in rooms:
                        faults.append(f"{name}: <{target}> belongs to {', '.join(sorted(rooms))}")
    for fault in faults:
        print(fault)
    print(f"{files} files, {len(faults)} forbidden includes")
    return 1 if faults or files == 0 else 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1]))
