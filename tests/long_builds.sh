#!/usr/bin/env bash
# The same bytes from other compilers and optimisations: builds the program anew with each and runs
# the golden studies and the hashes of the elementary functions and of integrations.
set -u
here=$(cd "$(dirname "$0")" && pwd)
cd "$here/.." || exit 1
passed=0 failed=0
build() { # compiler, options
  local folder
  folder=build/builds/$1$(printf '%s' "$2" | tr -d ' =')
  command -v "$1" >/dev/null || { echo "$1 is not on this machine: left out"; return; }
  if MAKELEVEL=0 make -s CC="$1" CFLAGS="$2" B="$folder" all >"$folder.log" 2>&1 &&
    MAKELEVEL=0 make -s CC="$1" CFLAGS="$2" B="$folder" "$folder/tests/test_elementary" \
      "$folder/tests/test_ode_orders" &&
    "$folder/tests/test_elementary" && "$folder/tests/test_ode_orders" && LATEWOOD=$folder/latewood "$here/test_golden.sh"; then
    passed=$((passed + 1))
  else
    failed=$((failed + 1))
    tail -n 5 "$folder.log"
    echo "FAILED $1 $2"
  fi
}
mkdir -p build/builds
build gcc "-O0"
build gcc "-O2"
build clang "-O0"
build clang "-O2"
build gcc "-O3 -march=native"
echo "$passed passed, $failed failed"
[ "$failed" -eq 0 ]
