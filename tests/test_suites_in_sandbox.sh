#!/usr/bin/env bash
# The Lua suites once more inside the program, in the sandbox of a study.
#
#   environment: LATEWOOD (the program), TMPDIR
set -u
: "${LATEWOOD:=build/latewood}" "${TMPDIR:=/tmp}"

"$LATEWOOD" run tests/suites_in_sandbox.lua --quiet >"$TMPDIR/out" 2>"$TMPDIR/said"
code=$?
grep -v '^[0-9]* passed' "$TMPDIR/said"
awk -v code="$code" '
  /^[0-9]+ passed, [0-9]+ failed$/ { passed += $1; failed += $3; n++ }
  END {
    if (n != 4 || code != 0) { failed++; print "suites that ended: " n + 0 "; exit code: " code }
    printf "%d passed, %d failed\n", passed, failed
    exit failed > 0
  }' "$TMPDIR/said"
