#!/usr/bin/env bash
# Copyright 2026 The prioritized_tracking contributors
# SPDX-License-Identifier: Apache-2.0
#
# The demo: two simulated arms track their paths through singularities; sets up everything it needs.
#
#     ./launch/demo.sh [--out DIR] [more arguments of `prioritized-tracking rehearse`]
#
# Results go to DIR/demo and DIR/planar; left out, DIR is results/.

set -euo pipefail
here=$PWD
cd "$(dirname "$0")/.."

out=results
arguments=()
while [ $# -gt 0 ]; do
    case $1 in
    -h | --help)
        sed -n 's/^# \{0,1\}//; 5,9p' "$0"
        exit 0
        ;;
    --out)
        [ $# -ge 2 ] || { echo "demo.sh: --out needs a folder" >&2; exit 2; }
        case $2 in /*) out=$2 ;; *) out=$here/$2 ;; esac
        shift 2
        ;;
    *)
        arguments+=("$1")
        shift
        ;;
    esac
done

. launch/environment.sh fast,report

# rehearse NAME STACK LAW...: one scenario under several laws; a law that fails its criteria is a result, not an error
rehearse() {
    local name=$1 stack=$2 laws=() code=0
    shift 2
    for law in "$@"; do laws+=(--law "$law"); done
    "$BIN/prioritized-tracking" rehearse "$stack" "${laws[@]}" --out "$out/$name" \
        ${arguments[@]+"${arguments[@]}"} || code=$?
    [ "$code" -le 1 ] || exit "$code"
}

echo
echo "Seven-axis arm: a probe goes once round the weld of a nozzle while it tilts through two chart singularities"
rehearse demo config/demo_stack.yaml prioritized cartesian_impedance
echo
echo "Planar arm: a pen draws along the arm's own reach limit"
rehearse planar config/planar_stack.yaml prioritized inverse_jacobian
echo
echo "Results: $out/demo/summary.json and $out/planar/summary.json"
