#!/bin/sh
# Copies what was built to where it is used, or takes it away again (--remove).
#
#   environment: DESTDIR PREFIX LIBDIR VERSION ABI B REQUIRES (see the Makefile)
#
# `each_file` is the one list of what is installed; both directions read it. DESTDIR comes before
# every path and never gets into a file.
set -eu

real=liblatewood.so.$VERSION
lua_files=$(cd scripts && find latewood -name '*.lua' 2>/dev/null | sort)
manuals=$(find scripts/man -name '*.[1-8]' 2>/dev/null | sort)

each_file() { # what to do with: mode, source, destination
  "$1" 755 "$B/latewood" "$PREFIX/bin/latewood"
  "$1" 644 "$B/liblatewood.a" "$LIBDIR/liblatewood.a"
  "$1" 755 "$B/liblatewood.so" "$LIBDIR/$real"
  "$1" 644 "$B/latewood.pc" "$LIBDIR/pkgconfig/latewood.pc"
  for file in engine/include/latewood/*.h; do
    "$1" 644 "$file" "$PREFIX/include/latewood/${file##*/}"
  done
  "$1" 755 "$B/lua/latewood.so" "$PREFIX/lib/lua/5.4/latewood.so"
  for file in $lua_files; do
    "$1" 644 "scripts/$file" "$PREFIX/share/lua/5.4/$file"
  done
  for file in $manuals; do
    "$1" 644 "$file" "$PREFIX/share/man/man${file##*.}/${file##*/}"
  done
}

put() {
  echo "install $DESTDIR$3"
  mkdir -p "$DESTDIR${3%/*}"
  install -m "$1" "$2" "$DESTDIR$3"
}

take() {
  rm -f "$DESTDIR$3"
}

if [ "${1:-}" = --remove ]; then
  each_file take
  rm -f "$DESTDIR$LIBDIR/liblatewood.so" "$DESTDIR$LIBDIR/liblatewood.so.$ABI"
  for folder in include/latewood share/lua/5.4/latewood; do
    [ ! -d "$DESTDIR$PREFIX/$folder" ] ||
      find "$DESTDIR$PREFIX/$folder" -depth -type d -empty -delete
  done
else
  sed -e "s|@PREFIX@|$PREFIX|" -e "s|@LIBDIR@|$LIBDIR|" -e "s|@VERSION@|$VERSION|" \
    -e "s|@REQUIRES@|$REQUIRES|" scripts/latewood.pc.in >"$B/latewood.pc"
  each_file put
  ln -sf "$real" "$DESTDIR$LIBDIR/liblatewood.so.$ABI"
  ln -sf "liblatewood.so.$ABI" "$DESTDIR$LIBDIR/liblatewood.so"
fi
