# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
#
# Sourced by launch/demo.sh and tests/run.sh, from the top of the repository:
#
#     . launch/environment.sh EXTRAS        # e.g. test,fast
#
# Makes a virtual environment with this package and the named extras in it and sets BIN to its bin folder.
# Needs Python 3.10 or newer and, the first time, the package index. A second run only compares a stamp.
#
#     PRIORITIZED_TRACKING_PYTHON   the Python to build on; left out: the first fitting one on the PATH
#     PRIORITIZED_TRACKING_VENV     the environment's folder; left out: .venv

extras=$1
venv=${PRIORITIZED_TRACKING_VENV:-.venv}

fail() {
    printf 'prioritized_tracking: %s\n' "$@" >&2
    exit 2
}

fits() { "$1" -c 'import sys; sys.exit(sys.version_info < (3, 10))' >/dev/null 2>&1; }

find_python() {
    if [ -n "${PRIORITIZED_TRACKING_PYTHON:-}" ]; then
        fits "$PRIORITIZED_TRACKING_PYTHON" || fail \
            "PRIORITIZED_TRACKING_PYTHON=$PRIORITIZED_TRACKING_PYTHON is not a Python 3.10 or newer."
        python=$PRIORITIZED_TRACKING_PYTHON
        return
    fi
    for python in python3 python3.13 python3.12 python3.11 python3.10 python; do
        if fits "$python"; then return; fi
    done
    fail "no Python 3.10 or newer found ($(python3 --version 2>&1 || true))." \
        "Install one (Debian, Ubuntu: sudo apt install python3 python3-venv), or name it:" \
        "    PRIORITIZED_TRACKING_PYTHON=/path/to/python3 $0"
}

make_venv() {
    find_python
    echo "Making a virtual environment in $venv with $("$python" --version 2>&1) ..."
    if "$python" -m venv --clear "$venv" >"$log" 2>&1; then return; fi
    # Debian keeps ensurepip in a package of its own; a pip of the system can do its work
    if "$python" -m venv --clear --without-pip "$venv" >>"$log" 2>&1 &&
        "$python" -m pip --python "$venv/bin/python" install --quiet pip >>"$log" 2>&1; then return; fi
    cat "$log" >&2
    rm -f "$log"
    fail "$python cannot make a virtual environment in $venv (see above)." \
        "Debian, Ubuntu: sudo apt install python3-venv. Another folder: PRIORITIZED_TRACKING_VENV=/path $0"
}

install_package() {
    echo "Installing prioritized_tracking[$extras] into $venv; the first time this takes some minutes ..."
    if "$venv/bin/python" -m pip install --disable-pip-version-check --quiet --use-pep517 -e ".[$extras]" \
        >"$log" 2>&1; then return; fi
    tail -n 40 "$log" >&2
    rm -f "$log"
    fail "the installation failed (see above)." \
        "Check the connection to the package index, then run $0 again; to start afresh, delete $venv."
}

# what the environment depends on: the package list, the place of the sources, the extras
fingerprint() {
    "$venv/bin/python" - "$extras" <<'PY'
import hashlib, os, sys
text = open("setup.py", "rb").read() + f"{os.getcwd()} {sys.argv[1]} {sys.version}".encode()
print(hashlib.sha256(text).hexdigest())
PY
}

log=$(mktemp)
if ! fits "$venv/bin/python"; then make_venv; fi
stamp="$venv/.installed-$extras"
if [ ! -f "$stamp" ] || [ "$(cat "$stamp")" != "$(fingerprint)" ]; then
    install_package
    fingerprint >"$stamp"
fi
rm -f "$log"
BIN=$venv/bin
