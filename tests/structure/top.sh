#!/bin/sh
# SPDX-License-Identifier: MIT
#
# What lies at the top of the tree: these names, and dot files.
. "$(dirname "$0")/common"

allowed=' README.md DEVELOPERS.md LICENSE Makefile src tests datasets-synthetic scripts '
top=$(tracked '*' | sed 's|/.*||' | sort -u)

verdict "nothing else lies at the top" "$(for name in $top; do
    case $name in .*) continue ;; esac
    case $allowed in *" $name "*) ;; *) echo "$name" ;; esac
done)"
verdict "what has to lie there does" "$(for name in README.md DEVELOPERS.md LICENSE Makefile src tests scripts; do
    printf '%s\n' "$top" | grep -qx "$name" || echo "$name is missing"
done)"
finish
