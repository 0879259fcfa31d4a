#!/usr/bin/env bash
# Builds with a sanitizer and runs under it. Usage: sanitize.sh asan-ubsan|tsan
#   asan-ubsan: every room's tests, and the program on a small night and on damaged files.
#   tsan:       the rooms that share work between threads, and the program on a small night.
set -euo pipefail
cd "$(dirname -- "${BASH_SOURCE[0]}")/.."
export CCACHE_BASEDIR=$PWD CCACHE_NOHASHDIR=1
preset=$1
build=build/$preset
export ASAN_OPTIONS=detect_leaks=1:abort_on_error=0 UBSAN_OPTIONS=print_stacktrace=1
case $preset in
    asan-ubsan) rooms=(core raster camera sky exposure crosstalk mask score simulate io contract) ;;
    tsan) rooms=(core exposure crosstalk mask contract) ;;
    *) echo "asan-ubsan or tsan, not '$preset'" >&2; exit 2 ;;
esac
cmake --preset "$preset" -DSTRAYMARK_TESTS=ON >/dev/null
cmake --build "$build" --target straymark "${rooms[@]/%/_test}"
for room in "${rooms[@]}"; do
    # [slow] marks cases that compare timings or large samples; they run without a sanitizer.
    "$build/tests/${room}_test" '~[slow]'
done
/usr/bin/python3 tests/end_to_end/sanitized_night.py "$build/straymark" "$build/small_night"
