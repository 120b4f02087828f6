#!/usr/bin/env bash
# Writes constraints.txt anew: the newest versions that all of Python 3.11, 3.12 and 3.13 found here agree on.
#
#   scripts/lock.sh python3.11 python3.12 python3.13
#
# The first Python resolves freely; each further one must accept the same versions.
set -euo pipefail
cd "$(dirname "$0")/.."

pythons=("${@:-python3.11}")
work=$(mktemp -d)
trap 'rm -rf "$work"' EXIT

head -n 2 constraints.txt >"$work/constraints.txt"
: >"$work/free.txt"
constraint="$work/free.txt"
for python in "${pythons[@]}"; do
    "$python" -m venv "$work/venv"
    "$work/venv/bin/pip" install --quiet --disable-pip-version-check -c "$constraint" '.[test]'
    if [ "$constraint" = "$work/free.txt" ]; then
        "$work/venv/bin/pip" freeze --exclude deckgen >"$work/frozen.txt"
        constraint="$work/frozen.txt"
    else
        "$work/venv/bin/pip" freeze --exclude deckgen | diff "$work/frozen.txt" - || {
            echo "lock: $python installs something else (above)" >&2
            exit 1
        }
    fi
    rm -rf "$work/venv"
done
cat "$work/frozen.txt" >>"$work/constraints.txt"
cp "$work/constraints.txt" constraints.txt
echo "lock: constraints.txt holds $(wc -l <"$work/frozen.txt") versions"
