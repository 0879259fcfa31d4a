#!/usr/bin/env bash
# Installs what config/debian-packages.txt lists and this machine lacks. Usage: setup.sh run|all
# Needs root, or sudo, only where something is missing. Sourced by nothing; safe to run again.
set -euo pipefail
here=$(cd -- "$(dirname -- "${BASH_SOURCE[0]}")" && pwd)

wanted() {  # the packages of the sections asked for
    awk -v all="$([ "$1" = all ] && echo 1 || echo 0)" '
        /^#/ || NF == 0 { next }
        /^\[/ { use = (all || $1 == "[run]"); next }
        use { print $1 }' "$here/debian-packages.txt"
}

missing=()
while read -r package; do
    state=$(dpkg-query -W -f '${db:Status-Status}' "$package" 2>/dev/null || true)
    [ "$state" = installed ] || missing+=("$package")
done < <(wanted "${1:?say run or all}")

if [ ${#missing[@]} -eq 0 ]; then
    exit 0
fi
echo "Installing from Debian: ${missing[*]}"
as_root=()
if [ "$(id -u)" -ne 0 ]; then
    if ! command -v sudo >/dev/null; then
        echo "These packages are missing and neither root nor sudo is at hand: ${missing[*]}" >&2
        exit 1
    fi
    as_root=(sudo)
fi
export DEBIAN_FRONTEND=noninteractive
"${as_root[@]}" apt-get update -qq
"${as_root[@]}" apt-get install -y -qq --no-install-recommends "${missing[@]}" >/dev/null
