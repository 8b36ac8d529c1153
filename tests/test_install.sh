#!/usr/bin/env bash
# An installed Latewood serves C, C++, Lua and the command line, and can be taken away whole.
set -u

: "${B:=build}" "${CC:=cc}" "${LUA:=lua5.4}"
# pkg-config's answers cannot be split where a path has blanks, as this one's own folder may.
work=$(mktemp -d -p /tmp)
trap 'rm -rf "$work"' EXIT
prefix=/opt/latewood
there=$work/stage$prefix
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

install_all() {
  make --no-print-directory B="$B" CC="$CC" DESTDIR="$work/stage" PREFIX=$prefix "$@"
}

# As for one who unpacked the staged tree: pkg-config is told where that is.
package() {
  PKG_CONFIG_PATH=$there/lib/pkgconfig PKG_CONFIG_SYSROOT_DIR=$work/stage \
    pkg-config "$@" latewood
}

installing_puts_every_file_below_the_prefix() {
  install_all install || return 1
  [ -x "$there/bin/latewood" ] && [ -e "$there/lib/liblatewood.so" ] &&
    [ -e "$there/lib/lua/5.4/latewood.so" ] &&
    [ "$(cd "$work/stage" && find . -type f ! -path ".$prefix/*" | wc -l)" -eq 0 ]
}

destdir_gets_into_no_text() {
  ! grep -rIl "$work" "$work/stage"
}

write_consumer() {
  cat >"$work/consumer.c" <<'C'
#include <latewood/status.h>
#include <stdio.h>
int main(void)
{
    return puts(lw_status_text(LW_OK)) < 0;
}
C
}

says_done() {
  [ "$("$@")" = "done" ]
}

c_program_links_with_the_shared_library() {
  local flags
  write_consumer
  read -ra flags <<<"$(package --cflags --libs)"
  $CC -std=c17 "$work/consumer.c" -o "$work/with_shared" "${flags[@]}" &&
    says_done env LD_LIBRARY_PATH="$there/lib" "$work/with_shared" &&
    ! "$work/with_shared" 2>/dev/null
}

c_program_links_with_the_archive() {
  local flags libraries
  write_consumer
  read -ra flags <<<"$(package --cflags)"
  read -ra libraries <<<"$(package --static --libs-only-l | sed 's/-llatewood//')"
  $CC -std=c17 "$work/consumer.c" -o "$work/with_archive" "${flags[@]}" \
    "$there/lib/liblatewood.a" "${libraries[@]}" && says_done "$work/with_archive"
}

headers_serve_cplusplus() {
  command -v c++ >/dev/null || return 0
  local header
  for header in "$there"/include/latewood/*.h; do
    echo "#include <latewood/${header##*/}>"
  done >"$work/headers.cc"
  c++ -std=c++17 -Wall -Wextra -Wpedantic -Werror -I"$there/include" -fsyntax-only "$work/headers.cc"
}

shared_library_exports_public_names_only() {
  local foreign
  foreign=$(nm -D --defined-only "$there/lib/liblatewood.so" | awk '{print $3}' |
    grep -vE '^(lw_[a-z]|LATEWOOD_)')
  [ -z "$foreign" ] || { echo "$foreign"; return 1; }
}

# LW_SHARED turns the mark of a public function into an attribute that is easy to find.
every_declared_function_is_exported() {
  local name missing=0
  for name in "$there"/include/latewood/*.h; do
    echo "#include <latewood/${name##*/}>"
  done >"$work/headers.c"
  $CC -E -P -DLW_SHARED -I"$there/include" "$work/headers.c" | tr '\n' ' ' |
    grep -oE 'visibility\("default"\)\)\)[^;(]*\(' | grep -oE 'lw_[a-z0-9_]+ *\($' |
    tr -d ' (' | sort -u >"$work/declared"
  [ -s "$work/declared" ] || { echo "no declarations found"; return 1; }
  nm -D --defined-only "$there/lib/liblatewood.so" | sed 's/.* //; s/@.*//' >"$work/exported"
  while read -r name; do
    grep -qxF "$name" "$work/exported" || { echo "declared, not exported: $name"; missing=1; }
  done <"$work/declared"
  return $missing
}

installed_module_loads_in_a_plain_interpreter() {
  (
    cd "$work" &&
      LUA_PATH="$there/share/lua/5.4/?.lua" LUA_CPATH="$there/lib/lua/5.4/?.so" \
        "$LUA" -e 'assert(type(require "latewood") == "table")'
  )
}

installed_program_starts() {
  (cd "$work" && "$there/bin/latewood" --help)
}

uninstalling_leaves_no_file() {
  install_all uninstall && [ "$(find "$work/stage" ! -type d | wc -l)" -eq 0 ] &&
    [ ! -e "$there/include/latewood" ]
}

property installing_puts_every_file_below_the_prefix
property destdir_gets_into_no_text
property c_program_links_with_the_shared_library
property c_program_links_with_the_archive
property headers_serve_cplusplus
property shared_library_exports_public_names_only
property every_declared_function_is_exported
property installed_module_loads_in_a_plain_interpreter
property installed_program_starts
property uninstalling_leaves_no_file

echo "$n_passed passed, $n_failed failed"
[ "$n_failed" -eq 0 ]
