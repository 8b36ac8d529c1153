#!/usr/bin/env bash
# The bytes of golden studies: figures, traces and JSON hash to what tests/golden/SUMS says, with
# the C library's wide paths on and masked. Builds with other compilers run the same test
# (tests/long_builds.sh).
#
#   environment: LATEWOOD (the program), TMPDIR; GOLDEN_WRITE=1 writes the sums anew
set -u
: "${LATEWOOD:=build/latewood}" "${TMPDIR:=/tmp}"
here=$(cd "$(dirname "$0")" && pwd)
sums=$here/golden/SUMS
passed=0 failed=0

hash_of() { # study, arguments of run
  local out=$TMPDIR/golden.$$
  rm -rf "$out"
  "$LATEWOOD" run "$@" --quiet --out "$out" >/dev/null 2>"$out.err"
  [ $? -le 2 ] || { cat "$out.err" >&2; echo broken; return; }
  (cd "$out" && find . -type f | LC_ALL=C sort | xargs sha256sum | sha256sum | cut -d' ' -f1)
  rm -rf "$out" "$out.err"
}

check() { # name, hash
  local want
  want=$(sed -n "s/^$1 //p" "$sums" 2>/dev/null)
  if [ -n "${GOLDEN_WRITE:-}" ]; then
    printf '%s %s\n' "$1" "$2" >>"$sums.new"
  elif [ -n "$want" ] && [ "$2" = "$want" ]; then
    passed=$((passed + 1))
  else
    failed=$((failed + 1))
    echo "FAILED $1: $2, wanted ${want:-nothing}"
  fi
}

both_ways() { # name, study and arguments
  local name=$1
  shift
  check "$name" "$(hash_of "$@")"
  [ -n "${GOLDEN_WRITE:-}" ] ||
    check "$name" "$(GLIBC_TUNABLES=glibc.cpu.hwcaps=-FMA,-AVX2,-FMA4,-AVX512F hash_of "$@")"
}

for kind in uniform triangular normal log_normal exponential gumbel modes stall mixed histogram; do
  both_ways "pieces-$kind" "$here/golden/pieces.lua" "kind=$kind"
done
both_ways mount_speed "$here/../examples/mount_speed.lua"

# The comparison must be able to fail: another seed gives other bytes.
if [ -z "${GOLDEN_WRITE:-}" ]; then
  other=$(hash_of "$here/golden/pieces.lua" --seed 13)
  if [ "$other" != "$(sed -n 's/^pieces-uniform //p' "$sums")" ]; then
    passed=$((passed + 1))
  else
    failed=$((failed + 1))
    echo "FAILED another_seed_gives_other_bytes"
  fi
fi

[ -z "${GOLDEN_WRITE:-}" ] || { mv "$sums.new" "$sums"; passed=$(wc -l <"$sums"); }
echo "$passed passed, $failed failed"
[ "$failed" -eq 0 ]
