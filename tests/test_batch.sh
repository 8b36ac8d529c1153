#!/bin/bash
# Batches through the program: the same ledger for any number of processes, going on after a kill,
# shares and rates judged with their bounds, sweeps, one run repeated alone, refusals.
set -u

LATEWOOD=${B:-build}/latewood
case $LATEWOOD in /*) ;; *) LATEWOOD=$PWD/$LATEWOOD ;; esac
work=$(mktemp -d)
trap 'rm -rf "$work"' EXIT
cd "$work" || exit 1
passed=0 failed=0 code=0

check() { # name, command of the test that must hold
  local name=$1
  shift
  if "$@"; then
    passed=$((passed + 1))
  else
    failed=$((failed + 1))
    printf 'FAILED %s: %s\n  exit code %s\n' "$name" "$*" "$code"
    head -n 5 out err 2>/dev/null
  fi
}
run() { # arguments of the program: leaves out, err, code
  timeout 60 "$LATEWOOD" "$@" >out 2>err
  code=$?
}
is() { [ "$1" = "$2" ]; }
has() { grep -qE -e "$2" "$1"; }

study() { # runs, requirement
  cat <<END
local lw = require "latewood"
local study = lw.study { function(p)
  local rig = lw.rig "coil"
  rig:plant { "coil", lw.plant.integrator { gain = 1 / p.inductance } }
  rig:source { "wanted", lw.source.step { at = 0, to = 1 } }
  rig:adc { "current", of = "coil.out", every = "100 us" }
  rig:dac { "bridge", to = "coil.in" }
  rig:loop { "loop", law = lw.law.p { kp = 20 }, wanted = "wanted", measured = "current",
    output = "bridge", latency = lw.timing.uniform("10 us", p.worst) }
  return rig
end, lasts = "4 ms", runs = $1, seed = 7,
  given = { inductance = lw.spread.normal(4e-3, "5 %"), worst = "60 us" },
  before = {}, after = { worst = "90 us" } $3 }
study:requirement { "overshoot", of = "coil.out", against = "wanted", $2 }
return study
END
}

# ---- the same content for any number of processes

study 300 'at_most = "8 %", share = "90 %"' '' >study.lua
run run study.lua --jobs 1 --ledger one --json
cp out one.json
first=$code
for jobs in 2 3 7; do
  run run study.lua --jobs "$jobs" --ledger "jobs$jobs" --json
  check "$jobs"_processes_say_the_same cmp -s <(sed 's/"jobs'"$jobs"'"/"one"/' out) one.json
  check "$jobs"_processes_end_alike is "$code" "$first"
done

# ---- killed on the way, then gone on with

for k in 1 2 3; do
  "$LATEWOOD" run study.lua --jobs 2 --ledger killed --quiet >out 2>err &
  sleep "0.0$k"
  kill -9 $! 2>/dev/null
  wait $! 2>/dev/null
done
run run study.lua --jobs 2 --ledger killed --json
check a_killed_batch_goes_on_to_the_same_end cmp -s <(sed 's/"killed"/"one"/' out) one.json

# ---- shards

for k in 0 1 2; do run run study.lua --shard "$k"/3 --ledger shards --quiet; done
run run study.lua --ledger shards --json
check shards_add_up_to_the_whole cmp -s <(sed 's/"shards"/"one"/' out) one.json
run run study.lua --shard 3/3 --ledger x
check a_shard_beyond_the_last_is_refused is "$code" 64
run run study.lua --shard 0/3
check a_shard_needs_a_ledger has err 'a shard is a part of a ledger'

# ---- a ledger of another study

study 301 'at_most = "8 %", share = "90 %"' '' >other.lua
cp other.lua study2.lua
run run study2.lua --ledger one
check another_study_is_refused is "$code" 78
check with_the_difference has err 'was made by another study|differs'
printf 'no ledger at all, but text\n%.0s' {1..200} >text
run run study.lua --ledger text
check text_is_no_ledger is "$code" 65
check and_stays is "$(wc -l <text)" 200

# ---- verdicts

study 300 'at_most = "100 %", share = "98 %"' '' >met.lua
run run met.lua --quiet
check a_share_that_holds_is_met is "$code" 0
study 300 'at_most = "0.001 %", share = "98 %"' '' >missed.lua
run run missed.lua --quiet
check a_share_that_does_not_is_not is "$code" 1
study 70 'at_most = "100 %", share = "99.9 %"' '' >few.lua
run run few.lua --quiet
check too_few_runs_leave_it_undecided is "$code" 2
study 100000 'at_most = "100 %", share = "90 %"' ', stop_early = true' >early.lua
run run early.lua
check a_clear_case_stops_at_a_checkpoint has out 'Judged after 128 runs a point, checkpoint 1'
study 20000 'at_most = "100 %"' ', stop_early = true, keep = "counts"' >counts.lua
run run counts.lua --ledger counts
check counts_alone_give_a_verdict is "$code" 0

# ---- sweeps

study 70 'at_most = "100 %"' '' | sed 's/given = {/sweep = { worst2 = { 1, 2 } }, given = { worst2 = 1,/' >sweep.lua
run run sweep.lua
check every_point_is_judged has out 'after, worst2=2 +met'
study 70 'at_most = "100 %"' '' | sed 's/given = {/sweep = { wurst = { 1, 2 } }, given = {/' >slip.lua
run run slip.lua
check a_slip_in_a_sweep_is_named has err 'no parameter "wurst"; nearest "worst"'

# ---- one run alone

run run study.lua --ledger one
worst=$(sed -n 's/.*after.*//; s/.*run \([0-9][0-9]*\).*/\1/p' out | tail -1)
run run study.lua --run "${worst:-0}" --json
check one_run_is_repeated_alone has out latewood-run-1
check its_number_is_kept has out "\"worst_run\": ${worst:-0}"

echo "$passed passed, $failed failed"
[ "$failed" -eq 0 ]
