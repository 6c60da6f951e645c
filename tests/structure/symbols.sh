#!/bin/sh
# SPDX-License-Identifier: MIT
#
# No two files of the library define the same name: the linker would take whichever it meets first out of an archive, and
# say nothing.
. "$(dirname "$0")/common"

library=${BUILD:-build}/libfescue.a
names=$(nm "$library" 2>/dev/null | awk '$2 ~ /^[TDBR]$/ { print $3 }')
verdict "the library has names" "$([ -n "$names" ] || echo "none in $library")"
verdict "each is defined once" "$(printf '%s\n' "$names" | sort | uniq -d)"
finish
