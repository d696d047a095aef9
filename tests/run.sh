#!/usr/bin/env bash
# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
#
# All tests; sets up everything they need. Arguments go to pytest:
#
#     ./tests/run.sh [-k NAME] [tests/test_file.py] ...

set -euo pipefail
cd "$(dirname "$0")/.."

. launch/environment.sh test,fast,report

code=0
"$BIN/python" -m pytest "$@" || code=$?
if [ "$code" -eq 0 ]; then echo "All tests passed."; else echo "TESTS FAILED (pytest exit code $code)." >&2; fi
exit "$code"
