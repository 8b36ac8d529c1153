#!/usr/bin/env bash
# Runs test programs (tests/NAME.c, as built), Lua tests and shell tests, several at a time, and
# prints what each said, in the order given.
#
#   usage: scripts/run-tests.sh tests/FILE.{c,lua,sh} ...
#   environment: B (build folder), LUA (a Lua 5.4), LUA_PRELOAD (for sanitized modules), JOBS
#
# 1. The exit code is 0 only if every test ran and passed, and at least one ran.
# 2. A test must say how many checks it made, in a last line like Check's "100%: Checks: 9, ..." or
#    like "9 passed, 0 failed" (Lua and shell tests); none at all counts as failed.
# 3. Each test gets an empty folder as TMPDIR, taken away when it passed.
set -u

: "${B:=build}" "${LUA:=lua5.4}" "${LUA_PRELOAD:=}" "${JOBS:=$(nproc 2>/dev/null || echo 2)}"
logs=$B/tests/logs
mkdir -p "$logs"

export B LUA
export LATEWOOD="$B/latewood"
export LUA_PATH="scripts/?.lua;scripts/?/init.lua;tests/?.lua;;"
export LUA_CPATH="$B/lua/?.so;;"
export LC_ALL=C
# Tests share the cores, and sanitized ones are slow: Check's own limit of 4 s is too near.
export CK_DEFAULT_TIMEOUT=120
export ASAN_OPTIONS="detect_leaks=1:${ASAN_OPTIONS:-}"
export UBSAN_OPTIONS="print_stacktrace=1:${UBSAN_OPTIONS:-}"

run_one() { # source file
  local name=${1##*/} result
  TMPDIR=$(cd "$logs" && pwd)/$name.tmp
  export TMPDIR
  rm -rf "$TMPDIR" && mkdir -p "$TMPDIR"
  case $1 in
  *.c) "$B/${1%.c}" ;;
  *.lua) env ${LUA_PRELOAD:+LD_PRELOAD="$LUA_PRELOAD"} "$LUA" "$1" ;;
  *.sh) bash "$1" ;;
  *) echo "not a test: $1"; false ;;
  esac >"$logs/$name.log" 2>&1 </dev/null
  result=$?
  if ! grep -qE '^100%: Checks: [1-9]|^([A-Za-z]+: )?[1-9][0-9]* passed, 0 failed' \
    "$logs/$name.log"; then
    echo "the closing line is missing, counts no check, or tells of failures" >>"$logs/$name.log"
    [ $result -ne 0 ] || result=1
  fi
  [ $result -ne 0 ] || rm -rf "$TMPDIR"
  echo $result >"$logs/$name.result"
}

for test in "$@"; do
  rm -f "$logs/${test##*/}".{log,result}
done

for test in "$@"; do
  while [ "$(jobs -rp | wc -l)" -ge "$JOBS" ]; do wait -n; done
  run_one "$test" &
done
wait

failed=()
for test in "$@"; do
  name=${test##*/}
  echo "== $test"
  cat "$logs/$name.log"
  result=$(cat "$logs/$name.result" 2>/dev/null || echo none)
  [ "$result" = 0 ] || failed+=("$test (exit code $result)")
done

if [ $# -eq 0 ]; then
  echo "run-tests: there are no tests to run" >&2
  exit 1
fi
if [ ${#failed[@]} -gt 0 ]; then
  printf 'run-tests: failed: %s\n' "${failed[@]}" >&2
  exit 1
fi
echo "run-tests: all $# test files passed"
