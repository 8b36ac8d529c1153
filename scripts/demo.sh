#!/usr/bin/env bash
# Runs the example study as a user would.
#
#   usage: scripts/demo.sh [STUDY.lua]
#   environment: B (build folder)
#
# A verdict is a result, not a failure: exit codes 0 (met), 1 (not met) and 2 (undecided) of the
# program all count as a demo that ran.
set -u

: "${B:=build}"
study=${1:-examples/mount_speed.lua}

echo "\$ latewood run $study"
"$B/latewood" run "$study"
status=$?
[ $status -le 2 ] || { echo "demo: the study did not run to a verdict" >&2; exit $status; }
