#!/bin/sh
# Prints a C file that holds Lua modules as bytes, for the program to carry inside itself.
#
#   usage: scripts/embed.sh ROOT FILE.lua ...
#
# ROOT/latewood/study.lua becomes the module "latewood.study". The list has the type that
# bindings/shipped.h declares and ends with an entry without a name.
set -eu

root=$1
shift

echo '// Made by scripts/embed.sh; changes here are lost.'
echo '#include "shipped.h"'

n=0
for file in "$@"; do
  printf '\nstatic const unsigned char text_%d[] = {\n' "$n"
  od -An -v -tu1 -w24 "$file" | sed 's/  *\([0-9][0-9]*\)/\1,/g; s/^/    /'
  # An empty file still needs an element; its length says that it does not count.
  echo '    0};'
  n=$((n + 1))
done

printf '\nconst lw__shipped lw__shipped_modules[] = {\n'
n=0
for file in "$@"; do
  name=${file#"$root"/}
  name=$(printf '%s' "${name%.lua}" | tr / .)
  printf '    {"%s", "%s", text_%d, sizeof text_%d - 1},\n' "${name%.init}" "$file" "$n" "$n"
  n=$((n + 1))
done
echo '    {0, 0, 0, 0}};'
