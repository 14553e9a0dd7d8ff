#!/bin/sh
# Runs every check: style, types, import layers, tests. Needs only Python 3.11 or later with pip.
#
#   sh tests/run.sh              everything
#   sh tests/run.sh -k geometry  arguments go to pytest
#
# PYTHON names the interpreter to build the environment with, where python3 is an older one.
set -eu

root=$(CDPATH='' cd -- "$(dirname -- "$0")/.." && pwd)
cd "$root"
venv=$root/.venv-test

find_python() {
    for candidate in ${PYTHON:-} python3 python3.14 python3.13 python3.12 python3.11 python; do
        if "$candidate" -c 'import sys; sys.exit(sys.version_info < (3, 11))' 2>/dev/null; then
            echo "$candidate"
            return
        fi
    done
    echo "run.sh: no Python 3.11 or later found; install one, or name it with PYTHON=/path/to/python3" >&2
    exit 1
}

if ! "$venv/bin/python" -m pip --version >/dev/null 2>&1; then
    python=$(find_python)
    echo "making a test environment in .venv-test with $("$python" --version)"
    rm -rf "$venv"
    "$python" -m venv "$venv" || {
        echo "run.sh: could not make a virtual environment; on Debian: apt-get install python3-venv" >&2
        exit 1
    }
fi

# A proper installation, not an editable one: what is tested is what the wheel holds.
export PIP_DISABLE_PIP_VERSION_CHECK=1
"$venv/bin/python" -m pip install --quiet '.[test]'
PATH=$venv/bin:$PATH
VIRTUAL_ENV=$venv
export PATH VIRTUAL_ENV
unset PYTHONPATH PYTHONHOME 2>/dev/null || true

echo "== style"
ruff check .
echo "== types"
mypy
echo "== import layers"
lint-imports --no-logo
echo "== tests"
python -m pytest "$@"
