"""The published JSON Schemas and the program must agree on what a camera or site file may say.

    schema_test.py CONFIG_PROBE SOURCE_FOLDER

Three sets of files go through both: the examples, a table of single changes to them, and small
files in which every value in turn is deleted or replaced by values of other kinds. Whatever a
schema refuses the program must refuse. What the program alone refuses must be for a reason that a
schema cannot express, listed in BEYOND_A_SCHEMA.
"""

import copy
import json
import os
import re
import subprocess
import sys
import tempfile

import jsonschema
import yaml


class CoreLoader(yaml.SafeLoader):
    """YAML 1.2 core schema, as editors that use JSON Schemas read it (PyYAML is YAML 1.1)."""


CoreLoader.yaml_implicit_resolvers = {}
for tag, pattern, first in [
    ("bool", r"^(?:true|True|TRUE|false|False|FALSE)$", "tTfF"),
    ("int", r"^[-+]?[0-9]+$", "-+0123456789"),
    ("float", r"^(?:[-+]?(?:\.[0-9]+|[0-9]+(?:\.[0-9]*)?)(?:[eE][-+]?[0-9]+)?"
              r"|[-+]?\.(?:inf|Inf|INF)|\.(?:nan|NaN|NAN))$", "-+.0123456789"),
    ("null", r"^(?:~|null|Null|NULL|)$", "~nN\0"),
]:
    CoreLoader.add_implicit_resolver("tag:yaml.org,2002:" + tag, re.compile(pattern), list(first) + [""])
CoreLoader.add_constructor("tag:yaml.org,2002:int", lambda loader, node: int(node.value, 10))

# What only the program can see: relations between values, other files, and text that YAML readers
# understand in different ways.
BEYOND_A_SCHEMA = [
    r"key '.*' a second time",  # YAML parsers drop one of the two before a schema is asked
    r"an anchor|an alias|a tag",
    r"without leading zeros",
    r"found -?\.(inf|nan)",  # a NaN is neither above nor below a bound
    r"without an amplifier|a section that overlaps",
    r"x1 <= x2|\.section\[\d\]: found \S+ expected a number of at least 1 and at most \d+$",  # the size
    r"an id of its own|a second time",
    r"a name under `layouts`|an amplifier of this detector's layout",
    r"no row for amplifier|of the camera file|an amplifier of that detector",
    r"on the source's clock",
    r"the radius of the obstruction|more than inner_mm|less than aperture_mm",
    r"struts\[1\]\.\w+: found \S+ expected a number .* at most 1150 mm",  # the aperture
    r"width_nm: found \S+ expected a number above 0 and at most 1244 nm",  # twice the wavelength
    r"detectors side by side|within 45 degrees|turns back at",
    r"each value of the type keyword once",
    r"a `suffix` of its own",
    r"No such file|a folder",
    r"a FITS keyword, with placeholders",  # its length without the placeholders
    r"a detector of camera",
]


def schema_verdict(validator, content):
    """True: accepted."""
    tree = yaml.load(content, CoreLoader) if isinstance(content, str) else content
    return validator.is_valid(tree)


class Bench:
    """Runs texts through schema and program and compares."""

    def __init__(self, probe, source):
        self.probe = probe
        self.source = source
        self.validators = {}
        for kind in ("camera", "site"):
            with open(os.path.join(source, "config", f"straymark-{kind}-1.schema.json")) as file:
                schema = json.load(file)
            jsonschema.Draft202012Validator.check_schema(schema)
            self.validators[kind] = jsonschema.Draft202012Validator(schema)
        self.failures = []
        self.compared = 0
        self.refused_by_schema = 0

    def example(self, name):
        with open(os.path.join(self.source, "tests", "camera_files", name)) as file:
            return file.read()

    def program_verdicts(self, kind, contents, beside):
        with tempfile.TemporaryDirectory() as folder:
            for name, content in beside.items():
                with open(os.path.join(folder, name), "w") as file:
                    file.write(content)
            paths = []
            for number, content in enumerate(contents):
                paths.append(os.path.join(folder, f"{number}.yaml"))
                with open(paths[-1], "w") as file:
                    # JSON is YAML.
                    file.write(content if isinstance(content, str) else json.dumps(content))
            run = subprocess.run([self.probe, kind, *paths], capture_output=True, text=True)
            if run.returncode != 0:
                raise SystemExit(f"config_probe died with {run.returncode}: {run.stderr}")
            return run.stdout.splitlines()

    def compare(self, kind, cases, beside):
        """cases: (what it is, text or tree, expected verdict or None)."""
        lines = self.program_verdicts(kind, [content for _, content, _ in cases], beside)
        assert len(lines) == len(cases)
        for (what, content, expected), line in zip(cases, lines):
            schema_accepts = schema_verdict(self.validators[kind], content)
            program_accepts = line == "ok"
            self.compared += 1
            self.refused_by_schema += not schema_accepts
            excused = any(re.search(reason, line) for reason in BEYOND_A_SCHEMA)
            if program_accepts and not schema_accepts:
                self.failures.append(f"{kind}: {what}: only the schema refuses")
            if schema_accepts and not program_accepts and not excused:
                self.failures.append(f"{kind}: {what}: only the program refuses: {line}")
            if expected is not None and program_accepts != expected:
                self.failures.append(f"{kind}: {what}: expected {expected}, program says {line}")


CAMERA_CHANGES = [
    # (from, to, is it a good camera file)
    ("name: petrel", "name: petrel", True),
    ("name: petrel", "name: petrel\nx_note: {any: [thing, 1, ~]}", True),
    ("parity: 1", "parity: -1", True),
    ("parity: 1", "parity: 1.0", True),
    ("parity: 1", "parity: 0", False),
    ("readout_s: 22.0", "readout_s: 2.2e1", True),
    ("start: MJD-OBS", "start: {date: DATE-OBS, time: UT}", True),
    ("start: MJD-OBS", "start: {date: DATE-OBS}", False),
    ("data: DATASEC", 'data: "[9:264,1:1024]"', True),
    ("data: DATASEC", 'data: "[9:264]"', False),
    ("data: DATASEC", 'data: "DATA{number}"', True),
    ("data: DATASEC", 'data: "DATA{amp}"', False),
    ("data: DATASEC", "data: HIERARCH PETREL DATA", True),
    ("data: DATASEC", "data: datasec", False),
    ("exposure: EXPTIME", "exposure: exptime", False),
    ("exposure: EXPTIME", "exposure: HIERARCH EXP TIME", True),
    ("exposure: EXPTIME,", "", False),
    ("exposure: EXPTIME", "exposur: EXPTIME", False),
    ("type: IMAGETYP, ", "", False),
    ("types: {sky: [OBJECT, SKY], dark: [DARK], flat: [FLAT], focus: [FOCUS]}", "x_types: none", False),
    ("sky: [OBJECT, SKY], ", "", False),
    ("dark: [DARK], ", "", True),
    ("dark: [DARK]", "dark: [1]", False),
    ("mount: altaz", "mount: equatorial", True),
    ("mount: altaz", "mount: equatorial\n  pier_flipped: W", False),
    ("mount: altaz", "mount: altazimuth", False),
    ("mount: altaz", "mount: altaz\n  pier_flipped: W", True),
    ("focal_length_mm: 8280", "focal_length_mm: 8.28", False),
    ("focal_length_mm: 8280", 'focal_length_mm: "8280"', False),
    ("focal_length_mm: 8280", "focal_length: 8280", False),
    ("derotated: true", "derotated: yes", False),
    ("derotated: true", "derotated: on", False),
    ("size: [2048, 2048]", "size: [2048, 2048, 1]", False),
    ("prescan: 8", "prescan: 8.5", False),
    ("prescan: 8", "prescan: 010", False),
    ("prescan: 8", "prescan: 8\n    prescan: 8", False),
    ("pixel_um: 15", "pixel_um: .nan", False),
    ("pixel_um: 15", "pixel_um: &p 15", False),
    ("distortion: [2.5, 0.0]", "distortion: [2.5]", False),
    ("id: d2,", "id: BITS,", False),
    ("id: d2,", "id: marks,", False),
    ("id: d2,", "id: d/2,", False),
    ("id: d2,", "id: 2,", False),
    ("id: d2,", "id: d1,", False),
    ("{a12: {status: dead}}", "{}", False),
    ("{a12: {status: dead}}", "{a12: {}}", True),
    ("{a12: {status: dead}}", "{a12: {status: broken}}", False),
    ("{a12: {status: dead}}", "{a12: {clock: mux}}", True),
    ("detector_section: DETSEC, order: readout", "x_none: 0", False),
    ("detector_section: DETSEC, order: readout", "order: detector", True),
    ("detector_section: DETSEC, order: readout", "detector_section: DETSEC", True),
    ('hdu: "{detector}_{amplifier}"', "hdu: primary", False),
    ('hdu: "{detector}_{amplifier}"', 'hdu: "im{number}"', True),
    ('hdu: "{detector}_{amplifier}"', 'hdu: "{detector"', False),
    ("role: science, amplifiers", "role: guide, amplifiers", True),
    ("format: straymark-camera/1", "format: straymark-camera/2", False),
    ("format: straymark-camera/1", "format: straymark-site/1", False),
]

SITE_CHANGES = [
    ("camera: petrel.yaml", "camera: petrel.yaml", True),
    ("persistence: off", "persistence: on", True),
    ("persistence: off", "persistence: false", True),
    ("persistence: off", "persistence: no", False),
    ("persistence: off", "persistance: off", False),
    ("crosstalk: 0.5", "crosstalk: 0", False),
    ("crosstalk: 0.5", "crosstalk: high", False),
    ("background_px: 64", "background_px: 64.5", False),
    ("template_noise: 0.3", "template_noise: -0.3", False),
    ("unassessed_fraction: 0.05", "unassessed_fraction: 5", False),
    ("defects: petrel_defects.csv", "x_defects: none", True),
    ("stars: stars.fits", "stars: 12", False),
    ("stars: stars.fits", "stars:", False),
    ("masks: masks/", "mask: masks/", False),
    ("format: straymark-site/1", "format: straymark-camera/1", False),
]

SMALL_CAMERA = """
format: straymark-camera/1
name: small
observatory: {latitude_deg: 31.2, longitude_deg: -110.4, height_m: 2120}
telescope:
  mount: equatorial
  derotated: true
  pier_flipped: W
  aperture_mm: 2300
  obstruction_mm: 920
  focal_length_mm: 8280
  struts: [{angle_deg: 41, width_mm: 14, inner_mm: 460, outer_mm: 1150}]
focal_plane: {pixel_um: 15, parity: 1, camera_angle_deg: {keyword: CAMANG, sign: 1, zero: 0}, distortion: [0.1, 0.1]}
filters: {r: {wavelength_nm: 622, width_nm: 138, zero_point: 25.9, extinction: 0.1}}
layouts:
  two:
    size: [40, 20]
    prescan: 2
    serial: x
    read: transfer
    amplifiers:
      - {id: a, section: [1, 20, 1, 20], corner: lower_left, suffix: A}
      - {id: b, section: [21, 40, 1, 20], corner: lower_right, suffix: B}
detectors:
  - {id: d1, layout: two, centre_mm: [-1, 0], rotation_deg: 0, flip: false, clock: main, board: b1, role: science}
  - {id: d2, layout: two, centre_mm: [1, 0], clock: main, amplifiers: {a: {clock: mux, status: dead}}}
amplifier_table: amplifiers.csv
readout_s: 22.0
types: {sky: [OBJECT], dark: [DARK], flat: [FLAT], focus: [FOCUS]}
pair_table: pairs.csv
headers: {id: OBS_ID, sequence: RUNSEQ, type: IMAGETYP, start: {date: DATE-OBS, time: UT}, end: MJD-END,
          exposure: EXPTIME, clear: MJD-CLR, readout_end: MJD-RD, filter: FILTER, ra: RA, dec: DEC,
          pier_side: PIERSIDE, temperature: CCDTEMP, mode: READMODE}
raw: {hdu: "{detector}_{amplifier}", data: "DATA{suffix}", bias: BIASSEC, prescan: "[1:2,1:20]", detector_section: DETSEC, order: readout}
"""
SMALL_TABLES = {
    "amplifiers.csv": "detector,amplifier,gain,read_noise,saturation\n"
                      + "".join(f"d{d},{a},1.5,5,60000\n" for d in (1, 2) for a in "ab"),
    "pairs.csv": "source,victim,offset\nd1/a,d1/b,1\n",
}

REPLACEMENTS = [None, True, "word", "two words", "", -1e9, 1e99, 0.5, 7, [], [1], {}, {"k": 1}]


def places(tree, path=()):
    """Paths of all values below a tree."""
    entries = tree.items() if isinstance(tree, dict) else enumerate(tree) if isinstance(tree, list) else []
    for key, value in entries:
        yield path + (key,)
        yield from places(value, path + (key,))


def changed(tree, path, change):
    tree = copy.deepcopy(tree)
    parent = tree
    for key in path[:-1]:
        parent = parent[key]
    change(parent, path[-1])
    return tree


def bounds_of(schema):
    """Property name -> the bounds that stand anywhere below it in a schema."""
    bounds = {}

    def collect(part, name):
        if isinstance(part, list):
            for item in part:
                collect(item, name)
        elif isinstance(part, dict):
            for key, value in part.items():
                if key in ("minimum", "maximum", "exclusiveMinimum") and name is not None:
                    bounds.setdefault(name, set()).add(value)
                elif key in ("properties", "$defs"):
                    for child, below in value.items():
                        collect(below, child)
                else:
                    collect(value, name)

    collect(schema, None)
    return bounds


def mutations(text, schema):
    """Every value deleted, replaced by other kinds and moved to and past its bounds; every mapping
    given an unknown key and a key of one's own."""
    tree = yaml.load(text, CoreLoader)
    bounds = bounds_of(schema)

    def case(what, path, change):
        name = ".".join(str(key) for key in path)
        return f"{name} {what}", changed(tree, path, change), None

    def replaced(path, value):
        return case(f"= {value!r}", path, lambda parent, key: parent.__setitem__(key, value))

    for path in places(tree):
        yield case("deleted", path, lambda parent, key: parent.pop(key))
        for value in REPLACEMENTS:
            yield replaced(path, value)
        value = tree
        for key in path:
            value = value[key]
        if isinstance(value, dict):
            yield case("with an unknown key", path, lambda parent, key: parent[key].update(unknown=1))
            yield case("with a key of one's own", path, lambda parent, key: parent[key].update(x_own=1))
        elif isinstance(value, (int, float)) and not isinstance(value, bool):
            name = [key for key in path if isinstance(key, str)][-1]
            for bound in sorted(bounds.get(name, ())):
                step = 1 if isinstance(value, int) and float(bound).is_integer() else 1e-3 * max(1, abs(bound))
                for moved in (bound - step, bound, bound + step):
                    yield replaced(path, moved)


def main():
    probe, source = sys.argv[1:]
    bench = Bench(probe, source)
    tables = {name: bench.example(name) for name in
              ("petrel.yaml", "petrel_amplifiers.csv", "petrel_pairs.csv", "petrel_defects.csv")}
    for kind, name, changes in [("camera", "petrel.yaml", CAMERA_CHANGES),
                                ("site", "petrel_site.yaml", SITE_CHANGES)]:
        base = bench.example(name)
        cases = []
        for before, after, good in changes:
            assert base.count(before) == 1, before
            cases.append((f"{before!r} -> {after!r}", base.replace(before, after), good))
        bench.compare(kind, cases, tables)
    bench.compare("camera", [("the small camera", SMALL_CAMERA, True)], SMALL_TABLES)
    bench.compare("camera", list(mutations(SMALL_CAMERA, bench.validators["camera"].schema)), SMALL_TABLES)
    bench.compare("site", list(mutations(bench.example("petrel_site.yaml"),
                                         bench.validators["site"].schema)), tables)
    for failure in bench.failures:
        print(failure)
    print(f"{bench.compared} files compared, {bench.refused_by_schema} refused by the schema, "
          f"{len(bench.failures)} disagreements")
    return 1 if bench.failures else 0


if __name__ == "__main__":
    sys.exit(main())
