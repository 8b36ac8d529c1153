#!/usr/bin/env bash
# Runs measurements one after the other, so that none disturbs another, and names the machine.
#
#   usage: scripts/run-bench.sh PROGRAM|FILE.lua ...
#   environment: B (build folder), LUA (a Lua 5.4)
set -u

: "${B:=build}" "${LUA:=lua5.4}"
export LUA_PATH="scripts/?.lua;scripts/?/init.lua;tests/?.lua;;"
export LUA_CPATH="$B/lua/?.so;;"
export LATEWOOD="$B/latewood"

if [ $# -eq 0 ]; then
  echo "run-bench: there is nothing to measure" >&2
  exit 1
fi

processor=$(sed -n 's/^model name[^:]*: *//p' /proc/cpuinfo 2>/dev/null | head -n 1)
echo "machine: $(uname -sm), $(nproc 2>/dev/null || echo ?) cores, ${processor:-unknown processor}"

status=0
for bench in "$@"; do
  echo "== ${bench##*/}"
  case $bench in
  *.lua) "$LUA" "$bench" ;;
  *) "$bench" ;;
  esac || { echo "run-bench: $bench failed" >&2; status=1; }
done
exit $status
