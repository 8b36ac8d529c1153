#!/bin/bash
# Every example runs and says what it is there to say: the verdict of its last variant.
set -u

program=${B:-build}/latewood
work=$(mktemp -d)
trap 'rm -rf "$work"' EXIT
passed=0 failed=0

expect() { # example, exit code, what its words must hold
  "$program" run "examples/$1.lua" --out "$work/$1" >"$work/out" 2>"$work/err"
  code=$?
  if [ "$code" = "$2" ] && grep -q "$3" "$work/out"; then
    passed=$((passed + 1))
  else
    failed=$((failed + 1))
    echo "FAILED $1: exit code $code, wanted $2 and '$3'"
    head -n 20 "$work/out" "$work/err"
  fi
}

expect mount_speed 0 'MET of the model'
expect camera_supply 1 'settling time: beyond the limit'
expect tube_at_rest 0 '2 of 2 requirements met'

for file in examples/*.lua; do
  grep -q "expect $(basename "$file" .lua) " "$0" || { echo "FAILED: $file is not expected"; failed=$((failed + 1)); }
done
echo "$passed passed, $failed failed"
[ "$failed" -eq 0 ]
