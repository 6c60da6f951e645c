#!/bin/sh
# SPDX-License-Identifier: MIT
#
# Every header compiles alone, as the only thing in a file; the public one also as C11, strictly, and as C++ where there
# is a compiler for it. Templates, *_kernel*.h, are no headers: their includers define what they need.
. "$(dirname "$0")/common"

warnings='-Wall -Wextra -Wconversion -Wshadow -Wstrict-prototypes -Werror'
paths='-Isrc -Isrc/include -I/usr/include/suitesparse -Itests/unit'

# compile HEADER COMPILER...: what it says to a file that includes the header and nothing else.
compile() {
    header=$1
    shift
    # shellcheck disable=SC2086 # lists of words
    printf '#include "%s"\n' "$header" | "$@" $paths -fsyntax-only - 2>&1 | head -n 5
}

for header in $(tracked 'src/*.h' 'tests/*.h'); do
    case $header in
    *_kernel*.h) continue ;;
    src/include/*) name=${header#src/include/} ;;
    src/*) name=${header#src/} ;;
    *) name=../$header ;;
    esac
    # shellcheck disable=SC2086
    verdict "$header compiles alone" "$(compile "$name" ${CC:-gcc} -x c -std=c17 -D_GNU_SOURCE $warnings)"
done
if [ -e src/include/fescue.h ]; then
    # shellcheck disable=SC2086
    verdict "fescue.h is strict C11" "$(compile fescue.h ${CC:-gcc} -x c -std=c11 -pedantic-errors $warnings)"
    for compiler in g++ clang++; do
        if command -v "$compiler" >/dev/null 2>&1; then
            verdict "fescue.h is C++ to $compiler" \
                "$(compile fescue.h "$compiler" -x c++ -std=c++11 -pedantic-errors -Wall -Wextra -Werror)"
        fi
    done
fi
finish
