#!/bin/sh
# Shows Oakum at work on a small sample archive. Needs only Python 3.11 or later with pip.
# Works on copies in a temporary folder; the first run makes an environment in .venv.
set -eu

samples=$(CDPATH='' cd -- "$(dirname -- "$0")" && pwd)
root=$(dirname -- "$samples")
venv=${OAKUM_VENV:-$root/.venv}

find_python() {
    for candidate in ${PYTHON:-} python3 python3.14 python3.13 python3.12 python3.11 python; do
        if "$candidate" -c 'import sys; sys.exit(sys.version_info < (3, 11))' 2>/dev/null; then
            echo "$candidate"
            return
        fi
    done
    echo "demo.sh: no Python 3.11 or later found; install one, or name it with PYTHON=/path/to/python3" >&2
    exit 1
}

unset PYTHONPATH PYTHONHOME 2>/dev/null || true
export PIP_DISABLE_PIP_VERSION_CHECK=1
if ! "$venv/bin/oakum" --version >/dev/null 2>&1; then
    echo "Setting up: a Python environment in .venv, once. This takes a minute."
    if ! "$venv/bin/python" -m pip --version >/dev/null 2>&1; then
        "$(find_python)" -m venv "$venv" || {
            echo "demo.sh: could not make a virtual environment; on Debian: apt-get install python3-venv" >&2
            exit 1
        }
    fi
    "$venv/bin/python" -m pip install --quiet --editable "$root"
    echo
fi
PATH=$venv/bin:$PATH

work=$(mktemp -d)
trap 'rm -rf "$work"' EXIT
trap 'exit 130' INT
trap 'exit 143' TERM
trap 'exit 129' HUP
cd "$work"

say() { printf '%s\n' "$@"; }
show() { printf '\n$ %s\n' "$*"; }
run() {
    show "$@"
    status=0
    "$@" || status=$?
}
expect() {
    if [ "$status" -ne "$1" ]; then
        say "" "demo.sh: that should have ended with status $1, not $status" >&2
        exit 1
    fi
}

say "The archive of Quernhaven, a harbour that never was, holds a year of its tide gauge:" \
    "hourly readings, the keepers' notes and two sheets of the gauge's pen."
cp -r "$samples/quernhaven" ledgers
run ls ledgers ledgers/sheets

say "" "1. Protect it. Everything oakum needs for a repair goes into one file beside the folder."
run oakum protect ledgers
expect 0

say "" "   The ledgers and their sidecar go on the shelf together. We put an exact copy aside," \
    "   only to have something to compare with at the end."
cp -r ledgers as-it-was

say "" "2. Years pass. This is what they did:" ""
python "$samples/damage.py" ledgers

say "" "3. Verify. Oakum finds the damage and says beforehand whether it can be put right."
run oakum verify ledgers
expect 10

say "" "   Status $status stands for damage that is all correctable, so a script can tell, too."

say "" "4. Repair. The corrected files go to a folder of their own; the damaged ones stay untouched."
run oakum repair ledgers --output mended
expect 0

say "" "5. Put the corrected files in the place of the damaged ones, and compare with the copy put aside."
run cp -r mended/ledgers/. ledgers/
expect 0
run diff -r as-it-was ledgers
expect 0
say "" "   diff has nothing to say: every file is back, bit for bit. Oakum agrees:"
run oakum verify ledgers
expect 0

say "" "That was all of it. README.md goes on from here; man oakum is the reference."
