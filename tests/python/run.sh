#!/usr/bin/env bash
# The checks that need Python: `tests/python/run.sh PATH_TO_BINARY [pytest arguments]`.
# Makes a virtual environment in .venv at the root of the repository ($TENPARSEC_VENV names another place), installs the
# exact pins of requirements.txt into it, once per content of that file, and runs pytest over this folder.
set -euo pipefail

here=$(cd "$(dirname "${BASH_SOURCE[0]}")" && pwd)
if [ $# -lt 1 ]; then
    echo "usage: tests/python/run.sh PATH_TO_BINARY [pytest arguments]" >&2
    exit 2
fi
binary=$1
shift
if [ ! -x "$binary" ] || [ -d "$binary" ]; then
    echo "$binary is not an executable file: build the program first, cargo build --release" >&2
    exit 2
fi
TENPARSEC_BINARY=$(cd "$(dirname "$binary")" && pwd)/$(basename "$binary")
export TENPARSEC_BINARY

venv=${TENPARSEC_VENV:-$here/../../.venv}
stamp=$venv/installed-requirements.txt
if ! cmp -s "$here/requirements.txt" "$stamp"; then
    python=$(command -v python3.11 || command -v python3)
    # A half-made environment from an interrupted run is made anew rather than repaired.
    "$python" -m venv --clear "$venv"
    "$venv/bin/python" -m pip install --quiet --disable-pip-version-check --retries 5 --requirement "$here/requirements.txt"
    cp "$here/requirements.txt" "$stamp"
fi

# -p no:cacheprovider and PYTHONDONTWRITEBYTECODE leave the clone as it was.
export PYTHONDONTWRITEBYTECODE=1
cd "$here"
exec "$venv/bin/python" -m pytest -p no:cacheprovider -ra --durations=5 "$@" .
