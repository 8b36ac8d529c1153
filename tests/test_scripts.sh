#!/usr/bin/env bash
# The shell helpers: set-up, embedding, the test runner, the recorder of a timer thread.
set -u

: "${B:=build}" "${CC:=cc}" "${TMPDIR:=/tmp}"
work=$(mktemp -d)
trap 'rm -rf "$work"' EXIT
n_passed=0
n_failed=0

property() { # name of a function below
  if "$1" >"$work/said" 2>&1; then
    n_passed=$((n_passed + 1))
  else
    n_failed=$((n_failed + 1))
    echo "failed: $1"
    sed 's/^/    /' "$work/said"
  fi
}

setup_is_silent_when_nothing_is_missing() {
  local said
  said=$(scripts/setup.sh tests 2>&1 >/dev/null) && [ -z "$said" ]
}

# A PATH with the shell's helpers only: no pkg-config, no package manager.
setup_names_what_is_missing_and_fails() {
  local tool said
  mkdir -p "$work/bare"
  for tool in sh env cat; do ln -sf "$(command -v $tool)" "$work/bare/"; done
  said=$(CC=cc PATH=$work/bare scripts/setup.sh build 2>&1) && return 1
  for tool in "a C compiler" pkg-config "GNU Scientific Library" SLEEF "Lua 5.4"; do
    [[ $said == *"$tool"* ]] || { echo "not named: $tool in: $said"; return 1; }
  done
}

embedded_modules_hold_the_bytes_of_their_files() {
  mkdir -p "$work/root/latewood/deep"
  printf 'return "a \\\\ \\200 %%d"\n' >"$work/root/latewood/one.lua"
  : >"$work/root/latewood/deep/empty.lua"
  head -c 3000 "$(command -v bash)" >"$work/root/latewood/bytes.lua"
  cat >"$work/main.c" <<'C'
#include "shipped.h"
#include <stdio.h>
int main(void)
{
    for (const lw__shipped *s = lw__shipped_modules; s->name; s++) {
        printf("%s %zu\n", s->name, s->n_bytes);
        fwrite(s->text, 1, s->n_bytes + 1, stdout);
    }
}
C
  (
    cd "$work/root" || exit 1
    for name in latewood.one latewood.deep.empty latewood.bytes; do
      file=${name//.//}.lua
      printf '%s %d\n' "$name" "$(wc -c <"$file")"
      cat "$file"
      printf '\0'
    done
  ) >"$work/wanted"
  scripts/embed.sh "$work/root" "$work/root"/latewood/{one,deep/empty,bytes}.lua >"$work/made.c" &&
    $CC -std=c17 -Wall -Wextra -Wpedantic -Werror -Ibindings "$work/main.c" "$work/made.c" \
      -o "$work/embedded" &&
    "$work/embedded" | cmp - "$work/wanted"
}

run_tests() { # exit code wanted, tests
  local wanted=$1
  shift
  env B="$work/build" LUA_PRELOAD= scripts/run-tests.sh "$@"
  [ $? -eq "$wanted" ]
}

runner_tells_passed_from_failed() {
  mkdir -p "$work/build$work"
  echo 'echo "1 passed, 0 failed"' >"$work/good.sh"
  echo 'exit 3' >"$work/bad.sh"
  echo 'print("2 passed, 0 failed")' >"$work/good.lua"
  echo 'error("no")' >"$work/bad.lua"
  run_tests 0 "$work/good.sh" "$work/good.lua" &&
    run_tests 1 "$work/good.sh" "$work/bad.sh" &&
    run_tests 1 "$work/bad.lua" "$work/good.lua"
}

runner_refuses_tests_that_check_nothing() {
  : >"$work/none.lua"
  echo 'echo "0 passed, 0 failed"' >"$work/zero.sh"
  printf '#!/bin/sh\necho "100%%: Checks: 0, Failures: 0, Errors: 0"\n' >"$work/build$work/no_checks"
  chmod +x "$work/build$work/no_checks"
  run_tests 1 && run_tests 1 "$work/none.lua" && run_tests 1 "$work/zero.sh" &&
    run_tests 1 "$work/no_checks.c"
}

recorder_writes_one_value_a_wakeup_and_says_how() {
  case $(uname -s) in Linux) ;; *) return 0 ;; esac
  $CC -std=c17 -O2 -pthread scripts/record_timer.c -o "$work/record_timer" || return 1
  "$work/record_timer" -n 25 -p 500 -l 1 -m "machine under test" >"$work/wakeups" || return 1
  grep -q '^# machine: machine under test' "$work/wakeups" &&
    [ "$(grep -cE '^[0-9]+\.[0-9]{3}$' "$work/wakeups")" -eq 25 ] &&
    ! "$work/record_timer" -n 0
}

kept_recording_is_whole() {
  local data=examples/data/timer_wakeups.txt
  [ "$(grep -cE '^[0-9]+\.[0-9]{3}$' $data)" -eq 20000 ] && [ "$(grep -vc '^#' $data)" -eq 20000 ]
}

property setup_is_silent_when_nothing_is_missing
property setup_names_what_is_missing_and_fails
property embedded_modules_hold_the_bytes_of_their_files
property runner_tells_passed_from_failed
property runner_refuses_tests_that_check_nothing
property recorder_writes_one_value_a_wakeup_and_says_how
property kept_recording_is_whole

echo "$n_passed passed, $n_failed failed"
[ "$n_failed" -eq 0 ]
