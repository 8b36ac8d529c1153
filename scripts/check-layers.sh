#!/bin/sh
# Proves from the #include lines that the arrows between folders run one way.
#
#   usage: scripts/check-layers.sh [DIR]       look at DIR (here unless stated)
#          scripts/check-layers.sh --self-test  prove that each rule can be broken and is then named
#
# 1. A folder of engine/ includes only itself and folders on lower rows of the table below.
# 2. A public header counts as the folder that `owner` gives it, else as the folder of its name.
# 3. engine/ never includes Lua's headers or anything of bindings/.
# 4. bindings/ includes only <latewood/...>, Lua's, the system's and its own headers.
set -eu

# shellcheck disable=SC2016
rules='
BEGIN {
    rows = "base|capture tape|plant law io cpu timing ode|run|theory|batch"
    n_rows = split(rows, row, "|")
    for (i = 1; i <= n_rows; i++) {
        n = split(row[i], name, " ")
        for (j = 1; j <= n; j++) rank[name[j]] = i
    }
    n = split("status time quantity elementary draw hash", name, " ")
    for (j = 1; j <= n; j++) owner[name[j]] = "base"
    owner["rig"] = "io"     # definitions of converters and loops, which io reads
    owner["watch"] = "run"
    owner["timed"] = "theory"
    owner["ready"] = owner["modes"] = owner["fit"] = "plant"
    owner["sensor"] = "io"  # definitions of encoders, filters before adcs, noise
    owner["event"] = owner["pwm"] = "io"    # definitions of comparators and trips
    owner["statistics"] = owner["ledger"] = owner["crew"] = "batch"
}

function complain(why) {
    printf "%s:%d: %s: %s\n", FILENAME, FNR, $0, why
    bad = 1
}

function readable(path) {
    got = (getline line < path) >= 0
    close(path)
    return got
}

# The folder that an included path belongs to: "" for the system, "?" where it is not known.
function folder_of(path, here,    part, name) {
    if (path ~ /(^|\/)\.\.(\/|$)/) return "?"
    if (path ~ /^(lua|lualib|lauxlib|luaconf)\.h(pp)?$/ || path ~ /^lua[0-9.-]*\//) return "lua"
    split(path, part, "/")
    if (part[1] == "latewood") {
        name = part[2]
        sub(/\.h$/, "", name)
        if (name in owner) return owner[name]
        return name in rank ? name : "?"
    }
    if (part[1] == "bindings" || part[1] in rank) return part[1]
    if (path !~ /\// && readable(here "/" path)) return here_folder
    return quoted ? "?" : ""
}

function check_engine(to) {
    if (to == "lua") complain("engine/ knows nothing of Lua")
    else if (to == "bindings") complain("engine/ knows nothing of bindings/")
    else if (to == "?") complain("belongs to no known folder")
    else if (to != "" && to != here_folder && rank[to] >= rank[here_folder])
        complain(here_folder " is not above " to)
}

function check_bindings(path, to) {
    if (path ~ /^latewood\//) {
        if (!readable(root "/engine/include/" path)) complain("no such public header")
    } else if (to != "" && to != "lua" && to != "bindings")
        complain("bindings/ uses the public headers and its own only")
}

FNR == 1 {
    relative = substr(FILENAME, length(root) + 2)
    n = split(relative, step, "/")
    here_folder = step[1] == "bindings" ? "bindings" : step[2]
    here = FILENAME
    sub(/\/[^\/]*$/, "", here)
    if (here_folder == "include") {
        here_folder = step[n]
        sub(/\.h$/, "", here_folder)
        if (here_folder in owner) here_folder = owner[here_folder]
    }
    if (here_folder != "bindings" && !(here_folder in rank)) {
        printf "%s: belongs to no known folder\n", FILENAME
        bad = 1
        nextfile
    }
}

/^[ \t]*#[ \t]*include/ {
    path = $0
    quoted = path ~ /"/
    sub(/^[^"<]*["<]/, "", path)
    sub(/[">].*$/, "", path)
    to = folder_of(path, here)
    if (here_folder == "bindings") check_bindings(path, to)
    # Public headers describe definitions that meet in one rig; they may name their own row.
    else if (relative !~ /^engine\/include\// || rank[to] != rank[here_folder]) check_engine(to)
}

END { exit bad }
'

look() { # folder
  files=$(find "$1/engine" "$1/bindings" -name '*.[ch]' 2>/dev/null | sort)
  [ -n "$files" ] || return 0
  # Names of source files hold no blanks.
  # shellcheck disable=SC2086
  awk -v root="$1" "$rules" $files
}

expect() { # verdict, file, include line, what the message must say
  mkdir -p "$(dirname "$tree/$2")"
  printf '%s\n' "$3" >"$tree/$2"
  got=pass
  said=$(look "$tree") || got=refuse
  case $got:$said in
  "$1":*"$4"*) ;;
  *)
    echo "check-layers: self-test: $2 with '$3' should $1 ($4), but: ${said:-nothing said}" >&2
    exit 1
    ;;
  esac
  rm "$tree/$2"
}

self_test() {
  tree=$(mktemp -d)
  trap 'rm -rf "$tree"' EXIT
  mkdir -p "$tree/engine/include/latewood" "$tree/engine/base" "$tree/bindings"
  for name in status run plant timing; do : >"$tree/engine/include/latewood/$name.h"; done
  : >"$tree/engine/base/own.h"
  : >"$tree/bindings/shared.h"

  expect pass engine/run/a.c '#include "plant/x.h"' ''
  expect pass engine/run/a.c '#include <latewood/run.h>' ''
  expect pass engine/base/a.c '#include "own.h"' ''
  expect pass engine/plant/a.c '#include <math.h>' ''
  expect pass engine/io/a.c '#include <latewood/rig.h>' ''
  expect pass engine/include/latewood/law.h '#include <latewood/timing.h>' ''
  expect pass bindings/a.c '#include <latewood/run.h>' ''
  expect pass bindings/a.c '#include <lauxlib.h>' ''
  expect pass bindings/a.c '#include "shared.h"' ''
  expect refuse engine/base/a.c '#include "run/x.h"' 'base is not above run'
  expect refuse engine/plant/a.c '#include "law/x.h"' 'plant is not above law'
  expect refuse engine/plant/a.c '  #  include <latewood/timing.h>' 'plant is not above timing'
  expect refuse engine/tape/a.h '#include <latewood/watch.h>' 'tape is not above run'
  expect refuse engine/include/latewood/time.h '#include <latewood/run.h>' 'base is not above run'
  expect refuse engine/run/a.c '#include <lua.h>' 'knows nothing of Lua'
  expect refuse engine/run/a.c '#include "lua5.4/lauxlib.h"' 'knows nothing of Lua'
  expect refuse engine/run/a.c '#include "bindings/shared.h"' 'knows nothing of bindings'
  expect refuse engine/run/a.c '#include "../plant/x.h"' 'no known folder'
  expect refuse engine/run/a.c '#include <latewood/unheard.h>' 'no known folder'
  expect refuse engine/extra/a.c '#include <math.h>' 'no known folder'
  expect refuse bindings/a.c '#include "run/kernel.h"' 'uses the public headers'
  expect refuse bindings/a.c '#include <base/own.h>' 'uses the public headers'
  expect refuse bindings/a.c '#include "../engine/base/own.h"' 'uses the public headers'
  expect refuse bindings/a.c '#include <latewood/unheard.h>' 'no such public header'
}

if [ "${1:-}" = --self-test ]; then
  self_test
else
  look "${1:-.}" || { echo "check-layers: an include points the wrong way" >&2; exit 1; }
fi
