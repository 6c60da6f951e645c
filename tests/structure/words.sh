#!/bin/sh
# SPDX-License-Identifier: MIT
#
# Words that every source has, and words that none has.
. "$(dirname "$0")/common"

verdict "every C source begins with the licence" "$(tracked '*.c' '*.h' '*.def' | while IFS= read -r file; do
    [ "$(head -n 1 "$file")" = '/* SPDX-License-Identifier: MIT' ] || echo "$file"
done)"

verdict "every script names the licence at its head" \
    "$(tracked Makefile '*.sh' '*.py' 'scripts/*' 'tests/run' 'tests/structure/*' '.ci/*' | sort -u |
        while IFS= read -r file; do
            head -n 2 "$file" | grep -qx '# SPDX-License-Identifier: MIT' || echo "$file"
        done)"

verdict "every manual page names the licence at its head" "$(tracked '*.1' | while IFS= read -r file; do
    head -n 1 "$file" | grep -qx '\.\\" SPDX-License-Identifier: MIT' || echo "$file"
done)"

# The brackets keep these patterns from finding themselves.
verdict "no file names a path of the machine it was written on" "$(tracked '*' | while IFS= read -r file; do
    grep -InE '(^|[^[:alnum:]_.)])/(ho[m]e|wo[r]k|ro[o]t)([^[:alnum:]_-]|$)|/tm[p]/b-' "$file" | sed "s|^|$file:|"
done)"

verdict "no file leaves work to be done" "$(tracked '*.c' '*.h' '*.sh' '*.py' Makefile '*.md' 'scripts/*' |
    while IFS= read -r file; do grep -InE 'TO[D]O|FIX[M]E' "$file" | sed "s|^|$file:|"; done)"

verdict "no C source has a tab or a blank at the end of a line" "$(tracked '*.c' '*.h' | while IFS= read -r file; do
    awk -v file="$file" '/\t|[ \t]$/ { print file ":" FNR }' "$file"
done)"
finish
