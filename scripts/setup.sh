#!/usr/bin/env bash
# Installs what is missing: ngspice and gnucap, and in .venv deckgen with its locked dependencies.
#
# PYTHON            the Python to build .venv with (default: the newest of 3.11 to 3.13 that works)
# DECKGEN_NGSPICE   an ngspice that is not on PATH
set -euo pipefail
cd "$(dirname "$0")/.."

venv=.venv
stamp=$venv/setup-stamp

say() { printf 'setup: %s\n' "$*" >&2; }
fail() { say "$@"; exit 1; }

# --- programs -----------------------------------------------------------------

have_ngspice() { [ -x "${DECKGEN_NGSPICE:-}" ] || command -v ngspice >/dev/null; }
have_gnucap() { command -v gnucap >/dev/null; }

package_manager() {
    local manager
    for manager in apt-get dnf brew; do
        if command -v "$manager" >/dev/null; then
            echo "$manager"
            break
        fi
    done
}

# Whether commands can be run as root: by root, or by sudo where it needs no password or can ask for one.
can_be_root() {
    [ "$(id -u)" -eq 0 ] || { command -v sudo >/dev/null && { [ -t 0 ] || sudo -n true 2>/dev/null; }; }
}

as_root() {
    if [ "$(id -u)" -eq 0 ]; then "$@"; else sudo "$@"; fi
}

lists_are_new=no
apt_install() {
    if [ $lists_are_new = no ]; then
        as_root apt-get -qq update || say "could not update the package lists; trying with those that are there"
        lists_are_new=yes
    fi
    as_root env DEBIAN_FRONTEND=noninteractive apt-get -qq install --yes --no-install-recommends "$@"
}

# Installs packages; where that is impossible, says what to do instead.
install_packages() {
    local manager
    manager=$(package_manager)
    if [ -z "$manager" ]; then
        say "none of apt-get, dnf and brew is here; install $* by hand"
        return 1
    fi
    if [ "$manager" != brew ] && ! can_be_root; then
        say "not root, and no sudo without a password; as root, run:  $manager install $*"
        return 1
    fi
    say "installing $*"
    case $manager in
        apt-get) apt_install "$@" ;;
        dnf) as_root dnf --quiet --assumeyes install "$@" ;;
        brew) brew install --quiet "$@" ;;
    esac >&2
}

install_programs() {
    have_ngspice || install_packages ngspice || true
    have_gnucap || install_packages gnucap || true
    have_ngspice || fail "ngspice is not here; install it, or set DECKGEN_NGSPICE to the program"
    have_gnucap || say "gnucap is not here: deckgen works without it, but one test of 'make test' will fail"
}

# --- Python -------------------------------------------------------------------

usable_python() {
    "$1" -c 'import sys, venv, ensurepip; sys.exit(not (3, 11) <= sys.version_info[:2] < (3, 14))' \
        2>/dev/null
}

find_python() {
    local candidate
    for candidate in ${PYTHON:-python3.13 python3.12 python3.11 python3}; do
        if command -v "$candidate" >/dev/null && usable_python "$candidate"; then
            echo "$candidate"
            return
        fi
    done
    return 1
}

install_python() {
    [ -z "${PYTHON:-}" ] || fail "PYTHON=$PYTHON is not a Python 3.11 to 3.13 with venv and pip"
    case $(package_manager) in
        apt-get) install_packages python3 python3-venv || true ;;
        dnf) install_packages python3.13 || install_packages python3.12 || true ;;
        brew) install_packages python@3.13 || true ;;
    esac
    find_python >/dev/null || fail "no Python 3.11 to 3.13 with venv is here; install one, or set PYTHON to it"
}

make_venv() {
    local python
    find_python >/dev/null || install_python
    python=$(find_python)
    say "making $venv with $("$python" --version)"
    "$python" -m venv --clear "$venv"
}

pip_install() {
    "$venv/bin/python" -m pip install --quiet --disable-pip-version-check --no-input \
        -c constraints.txt "$@" >&2
}

install_deckgen() {
    usable_python "$venv/bin/python" || make_venv
    say "installing deckgen and its dependencies"
    pip_install hatchling editables
    pip_install --no-build-isolation --editable '.[test]'
    # PySpice's sources warn when they are compiled; done once, here, nobody sees it again.
    "$venv/bin/python" -W ignore -m compileall -q "$("$venv/bin/python" - <<'PY'
import importlib.util
import pathlib

print(pathlib.Path(importlib.util.find_spec("PySpice").origin).parent)
PY
    )"
}

# --- stamp --------------------------------------------------------------------

wanted_stamp() { cat constraints.txt pyproject.toml scripts/setup.sh | cksum; pwd; }

up_to_date() {
    have_ngspice && [ -x "$venv/bin/deckgen" ] && [ -f "$stamp" ] &&
        [ "$(wanted_stamp)" = "$(cat "$stamp")" ] && usable_python "$venv/bin/python"
}

if ! up_to_date; then
    install_programs
    rm -f "$stamp"
    install_deckgen
    wanted_stamp >"$stamp"
    say "done"
fi
