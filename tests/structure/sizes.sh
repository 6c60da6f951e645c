#!/bin/sh
# SPDX-License-Identifier: MIT
#
# No function above 100 lines, no file above 800; the sizes in use are printed. A function is what stands between a line
# "{" and the next line "}", both at the left edge: so the one layout of the sources (make format) has it.
. "$(dirname "$0")/common"

function_most=100
file_most=800

# Lines "LENGTH FILE:LINE SIGNATURE", one a function.
functions=$(tracked '*.c' '*.h' | while IFS= read -r file; do
    awk -v file="$file" '
        /^[A-Za-z_]/ { signature = $0; line = FNR }
        /^\{$/ { start = FNR }
        /^\}$/ && start { print FNR - start + 1, file ":" line, signature; start = 0 }' "$file"
done)
files=$(tracked '*.c' '*.h' '*.def' '*.sh' '*.py' 'Makefile' 'scripts/*' | while IFS= read -r file; do
    echo "$(wc -l <"$file") $file"
done)

# figures WHAT: median, p90 and the longest of lines that begin with a length.
figures() {
    sort -n | awk -v what="$1" '
        { size[NR] = $1; last = $0 }
        END {
            if (NR == 0) exit
            sub("^[0-9]* ", "", last)
            printf "# %d %s: median %d lines, p90 %d, longest %d (%s)\n", NR, what, size[int((NR + 1) / 2)],
                   size[int((9 * NR + 9) / 10)], size[NR], last
        }'
}
printf '%s\n' "$functions" | grep ' src/' | figures "functions of src"
printf '%s\n' "$functions" | grep ' tests/' | figures "functions of tests"
printf '%s\n' "$files" | grep ' src/' | figures "files of src"
printf '%s\n' "$files" | grep ' tests/' | figures "files of tests"

verdict "there are functions to measure" "$([ -n "$functions" ] || echo none found)"
verdict "no function is longer than $function_most lines" \
    "$(printf '%s\n' "$functions" | awk -v most="$function_most" '$1 > most')"
verdict "no file is longer than $file_most lines" "$(printf '%s\n' "$files" | awk -v most="$file_most" '$1 > most')"
finish
