#!/usr/bin/env bash
# Fuzzes the boundary: header cards, sections, raw files, YAML, star lists, products. Usage:
#   run.sh SECONDS [NAME...]     for example: tests/fuzz/run.sh 60 cards yaml
# Builds with clang into build/fuzz. A crash, leak, hang or undefined behaviour ends it with its input.
set -euo pipefail
cd "$(dirname -- "${BASH_SOURCE[0]}")/../.."
seconds=$1
shift
cmake -S . -B build/fuzz -G Ninja -DCMAKE_CXX_COMPILER=clang++-14 -DCMAKE_BUILD_TYPE=RelWithDebInfo \
    -DCMAKE_CXX_FLAGS_RELWITHDEBINFO=-O1 -DSTRAYMARK_FUZZ=ON >/dev/null
cmake --build build/fuzz --target fuzzers
names=("$@")
if [ ${#names[@]} -eq 0 ]; then
    for source in tests/fuzz/*_fuzz.cpp; do
        name=$(basename "$source" _fuzz.cpp)
        names+=("$name")
    done
fi
for name in "${names[@]}"; do
    corpus=build/fuzz/corpus/$name
    mkdir -p "$corpus"
    # Seeds: what the tests keep for the same boundary.
    case $name in
        raw | cards) cp -n tests/fault/hostile/* tests/reference/wcs/* "$corpus"/ 2>/dev/null || true ;;
        yaml) cp -n tests/camera_files/*.yaml config/examples/*.yaml "$corpus"/ 2>/dev/null || true ;;
        star) cp -n demo_data/stars/*.csv "$corpus"/ 2>/dev/null || true ;;
    esac
    echo "== $name, $seconds s"
    log=build/fuzz/$name.log
    if ! "build/fuzz/tests/${name}_fuzz" -max_total_time="$seconds" -timeout=10 -rss_limit_mb=2048 \
        -max_len=65536 -print_final_stats=1 -verbosity=0 "$corpus" >"$log" 2>&1; then
        tail -40 "$log"
        exit 1
    fi
    grep "number_of_executed_units" "$log"
done
echo "no crash"
