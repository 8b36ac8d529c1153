#!/bin/sh
# Looks through the project's text for what must not be published: marks of unfinished work, paths
# of somebody's machine, marks of a merge, blanks at the end of a line.
#
#   usage: scripts/check-words.sh [DIR]        look at DIR (here unless stated)
#          scripts/check-words.sh --self-test  prove that each of them is found
#
# Each pattern is written so that it does not find itself.
set -eu

unfinished='(^|[^A-Za-z0-9_])(TO[D]O|FIX[M]E|XX[X]|HAC[K]|TB[D])([^A-Za-z0-9_]|$)|not (yet )?implemente[d]'
somewhere='(^|[^A-Za-z0-9_.~]|-[IL])/(hom[e]|roo[t]|User[s]|wor[k]|mn[t])/[A-Za-z0-9_.]|[A-Z]:\\User[s]'
merge='^(<{7}|={7}|>{7})( |$)'
blanks='[ 	]+$'

listed() { # folder: the files that are or could be committed, but for the licence and pictures
  (
    cd "$1"
    git ls-files -co --exclude-standard 2>/dev/null ||
      find . -type f ! -path './.git/*' ! -path './build/*' | sed 's,^\./,,'
  ) | grep -vE '^LICENSE$|\.png$'
}

# Prints what it finds; found nothing is success.
check() { # folder
  hits=$(
    listed "$1" | while IFS= read -r file; do printf '%s\0' "$1/$file"; done |
      xargs -0 grep -nIHEs -e "$unfinished" -e "$somewhere" -e "$merge" -e "$blanks" /dev/null
  ) || :
  [ -n "$(listed "$1")" ] || { echo "$1: no files to look at"; return 1; }
  [ -z "$hits" ] || { printf '%s\n' "$hits"; return 1; }
}

expect() { # verdict, line
  printf '%s\n' "$2" >"$tree/file.c"
  got=pass
  check "$tree" >/dev/null || got=refuse
  [ "$got" = "$1" ] || { echo "check-words: self-test: should $1: $2" >&2; exit 1; }
}

self_test() {
  tree=$(mktemp -d)
  trap 'rm -rf "$tree"' EXIT
  expect pass 'int mastodon; // a method, /usr/share, "/workspace", ..../home'
  expect refuse "// TO""DO later"
  expect refuse "x(); /* FIX""ME */"
  expect refuse "error(\"not imple""mented\")"
  expect refuse "path = \"/ho""me/someone/x\""
  expect refuse "-I/ro""ot/include"
  expect refuse "<<<<""<<< ours"
  expect refuse "blank at the end "
}

if [ "${1:-}" = --self-test ]; then
  self_test
else
  check "${1:-.}" || { echo "check-words: the lines above should not be published" >&2; exit 1; }
fi
