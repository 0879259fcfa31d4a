#!/usr/bin/env bash
# The main job on the demo night: installs what is missing, builds the program, simulates a night of
# raw exposures with known truth, makes a mask for each, and scores the masks against the truth.
# Everything it writes is in build/ and demo_data/night/. Run again: seconds.
set -euo pipefail
here=$(cd -- "$(dirname -- "${BASH_SOURCE[0]}")" && pwd)
cd "$here/.."
# A second clone reuses what the first one compiled.
export CCACHE_BASEDIR=$PWD CCACHE_NOHASHDIR=1
straymark=build/release/straymark
night=demo_data/night

step() { printf '\n== %s\n' "$*"; }

step "Set-up: Debian packages"
bash config/setup.sh run

step "Build: $straymark"
[ -f build/release/build.ninja ] || cmake --preset release -DSTRAYMARK_TESTS=OFF >/dev/null
cmake --build build/release --target straymark

step "Simulate: ten exposures of an invented observatory into $night"
stamp=$night/.made-by
made_by=$(cat demo_data/petrel_night.yaml demo_data/stars/*.csv "$straymark" | sha256sum)
if [ "$(cat "$stamp" 2>/dev/null || true)" != "$made_by" ]; then
    rm -rf "$night"
    "$straymark" simulate demo_data/petrel_night.yaml --out "$night"
    "$straymark" stars import "$night/stars.csv" --out "$night/stars.fits"
    echo "$made_by" > "$stamp"
else
    echo "already there"
fi

step "Masks: one for each raw exposure"
"$straymark" build --site "$night/site.yaml" "$night/raw"

step "Score: the masks against the truth of the simulation"
"$straymark" score --masks "$night/masks" --truth "$night/truth" --picture "$night/score.png"

printf '\nMasks:   %s\nPicture: %s\n' "$night/masks" "$night/score.png"
