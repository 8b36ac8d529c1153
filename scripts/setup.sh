#!/bin/sh
# Sees that this machine has what Latewood needs, and says how to compile against it.
#
#   usage: scripts/setup.sh build|tests|long|lint
#
# build: what the library, the Lua module and the program are made with; tests: what the tests
# need besides; long: what `make check-long` needs besides; lint: the tools of `make lint`.
#
# 1. Nothing missing: quick, silent, changes nothing.
# 2. Something missing on Debian and its relatives, as root or with sudo: one apt-get call for all
#    of it, each package named first.
# 3. Otherwise each missing thing is named and the exit code is 1; nothing has been changed.
# 4. Standard output carries only variables for make; messages go to standard error.
set -eu

say() { printf '%s\n' "$*" >&2; }
have_command() { command -v "$1" >/dev/null 2>&1; }
have_library() { pkg-config --exists "$1" 2>/dev/null; }

# Lua's module has no one name: the first of these that is a Lua 5.4 serves.
lua_library() {
  for name in lua5.4 lua-5.4 lua54 lua; do
    pkg-config --exists "$name >= 5.4" "$name < 5.5" 2>/dev/null && { echo "$name"; return; }
  done
  return 1
}

lua_command() {
  for name in lua5.4 lua54 lua; do
    have_command "$name" || continue
    case $("$name" -v 2>&1) in "Lua 5.4"*) echo "$name"; return ;; esac
  done
  return 1
}

# Some builds of Check report through subunit and must be linked with it.
have_check() {
  have_library check || return 1
  case $(pkg-config --libs check) in *-lsubunit*) have_library libsubunit ;; esac
}

# Without pkg-config only the package manager can tell what is there.
have_package() {
  have_command dpkg-query &&
    [ "$(dpkg-query -W -f '${db:Status-Status}' "$1" 2>/dev/null)" = installed ]
}

packages=
things=
missing() { # package, thing
  packages="$packages $1"
  things="$things
  $2 (Debian package $1)"
}

need_library() { # package, thing, test and its argument
  package=$1 thing=$2
  shift 2
  if have_command pkg-config; then
    "$@" >/dev/null || missing "$package" "$thing"
  else
    have_package "$package" || missing "$package" "$thing"
  fi
}

need_command() { # package, command
  have_command "$2" || missing "$1" "the command $2"
}

need_build() {
  cc=${CC:-cc}
  have_command "${cc%% *}" || missing gcc "a C compiler"
  need_command pkg-config pkg-config
  need_library liblua5.4-dev "the library Lua 5.4" lua_library
  need_library libgsl-dev "the GNU Scientific Library" have_library gsl
  need_library libsleef-dev "the library SLEEF" have_library sleef
  need_library libsqlite3-dev "the library SQLite" have_library sqlite3
}

need_tests() {
  need_build
  need_library check "the test library Check" have_check
  need_library libsubunit-dev "the library subunit, which Check may need" have_check
  lua_command >/dev/null || missing lua5.4 "the interpreter lua5.4"
}

have_python_module() { python3 -c "import $1" 2>/dev/null || /usr/bin/python3 -c "import $1" 2>/dev/null; }

have_header() { printf '#include <%s>\n' "$1" | ${CC:-cc} -E -x c - >/dev/null 2>&1; }

need_long() {
  need_tests
  have_python_module mpmath || missing python3-mpmath "Python's module mpmath"
  # the one test that compares with it does without where it cannot be installed
  have_header cvode/cvode.h || ! have_command apt-get || missing libsundials-dev "the library SUNDIALS"
  have_python_module scipy || missing python3-scipy "Python's module SciPy"
}

need_lint() {
  need_tests
  need_command clang clang
  need_command clang-format clang-format
  need_command shellcheck shellcheck
  need_command lua-check luacheck
}

# How to act as root: prints the prefix of a command, fails without the right to.
as_root() {
  [ "$(id -u)" -eq 0 ] && return 0
  have_command sudo || return 1
  if sudo -n true 2>/dev/null || [ -t 0 ]; then echo sudo; else return 1; fi
}

# Word splitting is wanted in these: a prefix that may be empty, a list of package names.
# shellcheck disable=SC2086
apt() {
  $root env DEBIAN_FRONTEND=noninteractive apt-get -q -y -o Dpkg::Use-Pty=0 "$@" </dev/null >&2
}

# shellcheck disable=SC2086
install_packages() {
  say "set-up: installing with apt-get:$packages"
  apt install --simulate $packages >/dev/null 2>&1 &&
    apt install --no-install-recommends $packages && return
  # The lists of packages are absent or old.
  apt update && apt install --no-install-recommends $packages
}

print_flags() { # prefix, module
  printf '%s_CFLAGS := %s\n' "$1" "$(pkg-config --cflags "$2")"
  printf '%s_LIBS := %s\n' "$1" "$(pkg-config --libs "$2")"
}

group=${1:-}
case $group in
build | tests | long | lint) "need_$group" ;;
*)
  say "usage: scripts/setup.sh build|tests|long|lint"
  exit 64
  ;;
esac

if [ -n "$packages" ]; then
  if have_command apt-get && root=$(as_root); then
    install_packages || { say "set-up: apt-get could not install:$packages"; exit 1; }
    packages=
    "need_$group"
    [ -z "$packages" ] || { say "set-up: installed, and yet not found:$packages"; exit 1; }
  else
    say "set-up: missing on this machine:$things"
    if have_command apt-get; then say "As root: apt-get install$packages"; fi
    exit 1
  fi
fi

case $group in
build)
  print_flags GSL gsl
  print_flags LUA "$(lua_library)"
  print_flags SLEEF sleef
  print_flags SQLITE sqlite3
  ;;
tests)
  print_flags CHECK check
  printf 'LUA := %s\n' "$(lua_command)"
  ;;
esac
