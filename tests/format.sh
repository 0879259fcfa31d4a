#!/usr/bin/env bash
# Formats every source file in place; with --check only says which differ, and fails.
set -euo pipefail
cd "$(dirname -- "${BASH_SOURCE[0]}")/.."
mode=(-i)
[ "${1:-}" = --check ] && mode=(--dry-run -Werror)
git ls-files -co --exclude-standard 'src/*.h' 'src/*.cpp' 'tests/*.h' 'tests/*.cpp' |
    xargs -r clang-format-14 "${mode[@]}"
