#!/usr/bin/env bash
# Installs what is missing, builds program and tests, and runs them all. Ends with the test runner's
# own summary. Run again: only what changed is built anew. Options go to ctest (for example -R mask).
set -euo pipefail
here=$(cd -- "$(dirname -- "${BASH_SOURCE[0]}")" && pwd)
cd "$here/.."
# A second clone reuses what the first one compiled.
export CCACHE_BASEDIR=$PWD CCACHE_NOHASHDIR=1
echo "== Set-up: Debian packages"
bash config/setup.sh all
echo "== Build: build/release"
cmake --preset release -DSTRAYMARK_TESTS=ON >/dev/null
cmake --build build/release
echo "== Tests"
exec ctest --test-dir build/release --output-on-failure --no-tests=error -j "$(nproc)" "$@"
