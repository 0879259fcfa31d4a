#!/usr/bin/env bash
# The sabotage study on a small night. Usage: small_sabotage.sh STRAYMARK FOLDER
set -euo pipefail
cd "$(dirname -- "${BASH_SOURCE[0]}")/../.."
straymark=$1 night=$2
rm -rf "$night"
"$straymark" simulate tests/study/small_night.yaml --out "$night" --quiet
"$straymark" stars import "$night/stars.csv" --out "$night/stars.fits" --quiet
exec /usr/bin/python3 tests/study/sabotage.py "$straymark" "$night"
