#!/usr/bin/env bash
# The program as a command: exit codes, streams, JSON, files, signals, terminals, and what a study
# may not reach. Messages of malformed studies have a suite of their own (test_malformed.lua).
#
#   environment: LATEWOOD (the program), LUA, LUA_PATH (to find tests/read_json.lua), TMPDIR
set -u
: "${LATEWOOD:=build/latewood}" "${LUA:=lua5.4}" "${TMPDIR:=/tmp}"
: "${LUA_PATH:=tests/?.lua;;}"
export LUA_PATH
here=$(cd "$(dirname "$0")" && pwd)
LATEWOOD=$(realpath "$LATEWOOD")
LUA_PATH="$here/?.lua;$LUA_PATH"
work=$TMPDIR/program.$$
mkdir -p "$work" && cd "$work" || exit 1
trap 'rm -rf "$work"' EXIT
passed=0 failed=0

# ---- what checks are made of

check() { # name, command of the test that must hold
  local name=$1
  shift
  if "$@"; then
    passed=$((passed + 1))
  else
    failed=$((failed + 1))
    printf 'FAILED %s: %s\n  exit code %s\n' "$name" "$*" "${code:-none}"
    head -n 5 out err 2>/dev/null
  fi
}
run() { # arguments of the program: leaves out, err, code
  "$LATEWOOD" "$@" >out 2>err
  code=$?
}
is() { [ "$1" = "$2" ]; }
empty() { [ ! -s "$1" ]; }
has() { grep -qE -e "$2" "$1"; }
lacks() { ! grep -qE -e "$2" "$1"; }
there() { [ -e "$1" ]; }
none_there() { [ ! -e "$1" ]; }
same() { cmp -s "$1" "$2"; }
n_lines() { [ "$(wc -l <"$1")" = "$2" ]; }
# A value in a JSON file, by keys and places: json FILE requirements 1 name
json() {
  "$LUA" -e '
    local read_json = require "read_json"
    local v = read_json(assert(io.open(arg[1], "rb")):read "a")
    for i = 2, #arg do v = v[tonumber(arg[i]) or arg[i]] end
    print(v == read_json.null and "null" or v)' - "$@" 2>&1
}

# A study: its one signal is p.x, required to be at most 2.
cat >study.lua <<'EOF'
local lw = require "latewood"
local study = lw.study { function(p)
  local rig = lw.rig "r"
  rig:source { "x", lw.source.constant(p.x) }
  rig:source { "noise", lw.source.noise { deviation = 1, every = "1 ms" } }
  return rig
end, lasts = "5 ms", given = { x = 1, flag = true, name = "n" } }
study:requirement { "final", of = "x", at_most = 2 }
study:metric { "noise", "final", of = "noise" }
study:figure { "signals", of = { "x", "noise" } }
return study
EOF
sed 's/"final", of = "x", at_most = 2/"rise time", of = "x", level = 9, base = 0, at_most = 1/' \
  study.lua >open.lua
sed '/requirement/d' study.lua >free.lua

# ---- exit codes and streams

run run study.lua
check a_study_that_is_met_ends_with_0 is $code 0
check results_go_to_standard_output has out '^\| MET of the model: 1 of 1 requirements met'
check nothing_else_is_said_on_standard_error empty err
check cautions_are_printed has out 'no functional-safety assessment'
check the_next_command_is_named has out '^next: latewood describe study.lua$'
check no_line_is_wider_than_80_columns lacks out '^.{81}'
check results_stand_beside_the_study there study-results/signals.svg

run run study.lua x=3
check a_study_that_is_not_met_ends_with_1 is $code 1
check the_verdict_is_printed has out '^\| NOT MET of the model: 0 of 1'
run run open.lua
check a_study_that_is_undecided_ends_with_2 is $code 2
check why_it_is_undecided_is_said has out 'rise time: never reached'
run run free.lua
check a_study_without_requirements_ends_with_0 is $code 0
check a_study_without_requirements_says_so has out 'nothing is judged'

run --help
check help_ends_with_0 is $code 0
check help_goes_to_standard_output has out '^exit codes$'
check help_is_no_error empty err
for command in run describe new; do
  run $command --help
  check "${command}_explains_itself" has out "^usage: latewood $command"
  check "${command}_explains_itself_with_0" is $code 0
done
for number in 0 1 2 64 65 66 70 73 74 128; do
  run --help
  check "exit_code_${number}_is_documented" has out "(^|  )$number "
done
run --version
check the_version_is_printed has out '^latewood [0-9]+\.[0-9]+\.[0-9]+$'
run
check no_command_is_wrong_usage is $code 64
check no_command_prints_help_aside has err '^usage:'
check no_command_prints_no_result empty out
run run
check a_missing_study_is_wrong_usage is $code 64
run run -q study.lua
check a_short_option_is_wrong_usage has err '^latewood: run has no option -q'
run run study.lua --seed 1 --seed=2
check an_option_given_twice_is_wrong_usage has err 'twice'
run run study.lua --seed -1
check a_negative_seed_is_wrong_usage is $code 64
run run study.lua --out ''
check an_empty_folder_is_wrong_usage is $code 64

# ---- parameters, seeds, runs

run run study.lua x=2.5 --quiet
check a_parameter_counts is $code 1
run run x=2.5 study.lua --quiet
check a_parameter_may_stand_before_the_study is $code 1
check quiet_prints_the_verdict_only is "$(cat out)" 'not met, of the model'
run run study.lua --json --seed 7
cp out seven
run run study.lua --seed=7 --json
check an_option_takes_its_value_either_way same out seven
run run study.lua --json --seed 8
check another_seed_draws_anew is "$([ "$(json out variants 1 metrics 2 values 1)" = \
  "$(json seven variants 1 metrics 2 values 1)" ] || echo differs)" differs
run run study.lua --json --runs 12
check the_number_of_runs_is_as_asked is "$(json out variants 1 metrics 2 values 12)" \
  "$(json out variants 1 metrics 2 values 12 | grep -E '^-?[0-9]')"
check the_bound_is_three_over_n is "$(json out bound failing_below)" 0.25
run run study.lua --runs 12
check the_bound_is_printed has out 'fewer than 25 % of'

# ---- JSON

run run study.lua --json
check json_has_a_versioned_schema is "$(json out schema)" latewood-run-1
check json_has_the_verdict is "$(json out verdict)" met
check json_is_all_that_is_printed empty err
check the_file_holds_the_same_json same out study-results/result.json
run run study.lua x=3 --json
check json_keeps_the_exit_code is $code 1
run run open.lua --json
check what_is_no_number_is_null is "$(json out requirements 1 variants 1 worst)" null
run run none.lua --json
check an_error_is_json_too is "$(json out exit_code)" 66
check an_error_is_said_as_well has err '^latewood: none.lua: no such file$'
run run study.lua --jsn --json
check wrong_usage_is_json_too is "$(json out schema)" latewood-error-1
run rum --json
check an_unknown_command_is_json_too is "$(json out exit_code)" 64
run describe study.lua --json
check a_description_is_json_too is "$(json out schema)" latewood-describe-1
printf 'error("\\xff \\27[31m\\nsecond")' >bytes.lua
run run bytes.lua --json
check any_bytes_in_a_message_become_json is "$(json out exit_code)" 65
check a_message_is_one_line n_lines err 1
check a_message_commands_no_terminal lacks err "$(printf '\033')"
printf '{"a": nan}' >bad.json
json bad.json a >out
check the_reader_of_json_can_refuse has out 'null is wanted'

# ---- files

run run study.lua --out there/it/is --quiet
check out_makes_its_folders there there/it/is/result.json
check nothing_half_written_is_left is "$(find . -name '*partial*')" ''
run run study.lua --out again --quiet
check the_same_study_gives_the_same_files is "$(diff -r there/it/is again 2>&1)" ''
echo old >again/result.json
run run study.lua --out again --quiet
check old_results_are_replaced is "$(json again/result.json schema)" latewood-run-1
check traces_are_csv is "$(head -n 1 again/signals--x.csv | tr -d '\r')" time,value
mkdir -p taken/signals.svg
run run study.lua --out taken --quiet
check a_file_that_cannot_be_made_ends_with_73 is $code 73
check a_file_that_cannot_be_made_is_named has err '^latewood: taken/signals.svg: '
check a_failed_write_leaves_no_rest is "$(find taken -name '.*partial*')" ''
run run study.lua --out study.lua/x --quiet
check a_folder_that_cannot_be_made_ends_with_73 is $code 73
(
  trap '' XFSZ
  ulimit -f 4
  "$LATEWOOD" run study.lua --out full --quiet >/dev/null 2>&1
)
code=$?
check a_file_that_cannot_be_written_ends_with_74 is $code 74
check a_file_that_cannot_be_written_is_not_there none_there full/signals.svg
if [ -e /dev/full ]; then
  "$LATEWOOD" run study.lua >/dev/full 2>err
  code=$?
  check output_that_cannot_be_written_ends_with_74 is $code 74
fi
mkdir 'a b'
cp study.lua "a b/it's.lua"
run run "a b/it's.lua"
check the_next_command_can_be_typed has out "^next: latewood describe 'a b/it'\\\\''s.lua'\$"
check a_path_with_blanks_works there "a b/it's-results/result.json"

run describe study.lua
check a_description_names_what_is_there has out '^source "x"'
rm -rf study-results
run describe study.lua
check a_description_writes_nothing none_there study-results

# ---- a study to start from

run new fresh/start
check new_ends_with_0 is $code 0
check new_names_the_next_command has out '^next: latewood run fresh/start/study.lua$'
(cd fresh/start && "$LATEWOOD" run study.lua >"$work/out" 2>"$work/err")
code=$?
check the_starter_runs is $code 0
check the_starter_says_nothing_aside empty err
check the_starter_draws there fresh/start/study-results/current.svg
check the_starter_is_0BSD has fresh/start/study.lua 'SPDX-License-Identifier: 0BSD'
check the_starter_says_what_is_invented has fresh/start/study.lua 'invented'
check the_editor_is_told is "$(json fresh/start/.luarc.json runtime.version)" 'Lua 5.4'
echo mine >fresh/start/README.md
rm fresh/start/study.lua
run new fresh/start
check new_overwrites_nothing is "$code $(cat fresh/start/README.md)" '73 mine'
check new_writes_all_or_nothing none_there fresh/start/study.lua
run new fresh/json --json
check new_speaks_json is "$(json out schema)" latewood-new-1

# ---- signals

{
  "$LATEWOOD" run study.lua --json 2>err
  echo $? >rc
} | true
check a_closed_pipe_makes_no_noise empty err
check a_closed_pipe_ends_with_141 is "$(cat rc)" 141
sed 's/lasts = "5 ms"/lasts = "9e6 s"/' study.lua >long.lua
for signal in INT:130 TERM:143; do
  # a shell's job in the background ignores SIGINT: give the program its default back
  env --default-signal=INT timeout --preserve-status -s "${signal%:*}" 0.3 \
    "$LATEWOOD" run long.lua >out 2>err
  code=$?
  check "SIG${signal%:*}_ends_with_${signal#*:}" is $code "${signal#*:}"
  check "SIG${signal%:*}_leaves_no_results" none_there long-results
done

# ---- terminals

if command -v script >/dev/null; then
  on_terminal() { # environment, arguments: leaves out, with what went to the terminal
    env -u NO_COLOR "$1" script -qec "$LATEWOOD $2" /dev/null >out 2>err </dev/null
  }
  escape=$(printf '\033\\[1;')
  on_terminal TERM=xterm "run study.lua"
  check a_verdict_is_coloured_on_a_terminal has out "${escape}34mMET"
  on_terminal TERM=dumb "run study.lua"
  check not_on_a_dumb_one lacks out "$(printf '\033')"
  env NO_COLOR=1 TERM=xterm script -qec "$LATEWOOD run study.lua" /dev/null >out 2>err </dev/null
  check nor_with_NO_COLOR lacks out "$(printf '\033')"
  on_terminal TERM=xterm "run study.lua --runs 20 2>&1 >/dev/null"
  check progress_is_shown_on_a_terminal has out 'run 19 of 20'
  on_terminal TERM=xterm "run study.lua --runs 20 --quiet"
  check quiet_shows_no_progress lacks out 'of 20'
fi
run run study.lua --runs 20
check no_progress_elsewhere empty err
check no_colour_elsewhere lacks out "$(printf '\033')"

# ---- what a study may not reach

mkdir -p jail/parts outside
cp study.lua jail/
echo 'return 1' >outside/secret.lua
printf '1\n2\n' >outside/times.txt
ln -s ../outside/secret.lua jail/link.lua
ln -s ../outside jail/door
ln -s ../outside/times.txt jail/times.txt
echo 'return { value = 5, name = ..., math = math, sees = io or os or debug or package }' \
  >jail/parts/one.lua
cat >jail/escape.lua <<'EOF'
local lw = require "latewood"
local function escaped(what) print("ESCAPED: " .. what) end
for _, name in ipairs { "io", "os", "package", "debug", "dofile", "loadfile", "collectgarbage" } do
  if _G[name] ~= nil or load("return " .. name)() ~= nil then escaped(name) end
end
if string.dump or ("").dump then escaped "string.dump" end
-- files
for _, name in ipairs { "link", "door.secret", "../outside/secret", "/etc/passwd", "..outside.secret",
  "latewood.study", "io", "", ("x"):rep(500) } do
  if pcall(require, name) then escaped("require " .. name) end
end
for _, name in ipairs { "times.txt", "door/times.txt", "../outside/times.txt", "/etc/passwd",
  "a\0b", "." } do
  if pcall(lw.timing.replay, { file = name, unit = "us" }) then escaped("data " .. name) end
end
-- code
if load("\27Lua") then escaped "load of bytecode" end
local pieces = { "ua", "\27L" }
if load(function() return table.remove(pieces) end) then escaped "load of bytecode in pieces" end
pieces = { "turn 5", "re" }
assert(load(function() return table.remove(pieces) end)() == 5)
if load("return io", "x", "b") and load("return io", "x", "b")() then escaped "load with a mode" end
if pcall(setmetatable, {}, { __gc = print }) then escaped "__gc" end
if pcall(function() getmetatable("").__index = {} end) then escaped "strings" end
for what, thing in pairs { lw = lw, plant = lw.plant, study = lw.study, rig = lw.rig "r",
  plant_object = lw.plant.gain { gain = 1 }, timing = lw.timing.constant(1) } do
  if type(getmetatable(thing)) == "table" then escaped("metatable of " .. what) end
  if pcall(setmetatable, thing, {}) then escaped("setmetatable of " .. what) end
end
local seen = {}
local function walk(t, path) -- everything within reach
  if seen[t] then return end
  seen[t] = true
  for k, v in next, t do
    if k == "popen" or k == "execute" and path ~= "lw.study" or k == "getinfo" then
      escaped(path .. "." .. tostring(k))
    end
    if type(v) == "table" then walk(v, path .. "." .. tostring(k)) end
  end
end
walk(_G, "_G")
walk(lw, "lw")
-- what is permitted
local one = require "parts.one"
assert(one.value == 5 and one.name == "parts.one" and not one.sees and require "parts.one" == one)
assert(math.sin(1) == lw.math.sin(1) and one.math == math)
local names = {}
for k, v in pairs { zeta = 1, alpha = 2, 30, 10, [2.5] = 3, [true] = 4, mid = 5 } do
  names[#names + 1] = tostring(k) .. v
end
assert(table.concat(names, " ") == "130 210 2.53 alpha2 mid5 zeta1 true4", table.concat(names, " "))
return require "study"
EOF
run run jail/escape.lua --quiet
check a_study_reaches_nothing_outside lacks err ESCAPED
check what_is_permitted_works is "$code $(cat err)" '0 '
sed -i 's/^-- files$/escaped "on purpose"/' jail/escape.lua
run run jail/escape.lua --quiet
check an_escape_would_be_seen has err 'ESCAPED: on purpose'

# A study that changes libraries changes its own only.
run run study.lua --json
cp out honest
{
  echo 'local lw0 = require "latewood"'
  echo 'for k in pairs(string) do string[k] = function() return "0" end end'
  echo 'for _, t in ipairs { lw0.math, table } do for k in pairs(t) do t[k] = nil end end'
  echo 'for _, k in ipairs { "nearest", "quantity", "number_text", "fail" } do lw0[k] = nil end'
  cat study.lua
} >study2.lua
mv study2.lua study.lua
run run study.lua --json
check libraries_changed_by_a_study_stay_its_own same out honest

# Instructions are limited at a stretch, inside coroutines too.
cat >spin.lua <<'EOF'
local function spin(n)
  while true do
    pcall(coroutine.wrap(function() if n > 0 then spin(n - 1) end while true do end end))
  end
end
spin(3)
EOF
run run spin.lua
check coroutines_bring_no_new_instructions is $code 65
check a_loop_without_end_is_named has err 'is there a loop without end'

echo "$passed passed, $failed failed"
[ "$failed" -eq 0 ]
