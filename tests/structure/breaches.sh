#!/bin/sh
# SPDX-License-Identifier: MIT
#
# The test of the tests of structure: in a small tree that breaks no rule all of them pass; with one breach planted, just
# the one that should complains.
here=$(cd "$(dirname "$0")" && pwd)
set -u
tests=0
failures=0
tree=$(mktemp -d) || exit 70
trap 'rm -rf "$tree"' EXIT
unset BUILD
TREE=$tree
export TREE

plant_good() {
    rm -rf "${tree:?}"/* "$tree"/.[!.]*
    mkdir -p "$tree/src/base" "$tree/src/table" "$tree/src/judge" "$tree/src/write" "$tree/src/cli" "$tree/src/include" \
        "$tree/tests" "$tree/scripts"
    for name in README.md DEVELOPERS.md LICENSE; do echo text >"$tree/$name"; done
    for name in Makefile scripts/go tests/run; do echo '# SPDX-License-Identifier: MIT' >"$tree/$name"; done
    source_put src/include/fescue.h 'int fescue_go(void);'
    source_put src/base/base.h '#include "fescue.h"'
    source_put src/base/base_internal.h '#include "base/base.h"'
    source_put src/base/status.c '#include "base/base_internal.h"' 'int fescue_go(void)' '{' '    return 0;' '}'
    source_put src/table/table.h '#include "base/base.h"'
    source_put src/judge/judge.h '#include "table/table.h"'
    source_put src/write/write.h '#include "judge/judge.h"'
    source_put src/cli/cli.h '#include "fescue.h"'
    source_put src/cli/main.c '#include "cli.h"'
}

# source_put FILE LINE...: a C source that begins with the licence.
source_put() {
    target=$tree/$1
    shift
    echo '/* SPDX-License-Identifier: MIT' >"$target"
    printf '%s\n' ' */' "$@" >>"$target"
}

# expect SCRIPT passes|fails TEXT
expect() {
    tests=$((tests + 1))
    if output=$("$here/$1" 2>&1); then result=passes; else result=fails; fi
    case $result:$output in
    fails:*"not ok"*) ;;
    fails:*) result="dies without a verdict" ;;
    esac
    if [ "$result" = "$2" ]; then
        echo "ok $tests - $1 $2: $3"
    else
        failures=$((failures + 1))
        echo "not ok $tests - $1 $result: $3"
        printf '%s\n' "$output" | sed 's/^/# /'
    fi
}

# breach SCRIPT TEXT: the planted breach is found; then the tree is mended.
breach() {
    expect "$1" fails "$2"
    plant_good
}

long_body() {
    awk -v n="$1" 'BEGIN { for (k = 0; k < n; k++) print "    ;" }'
}

plant_good
for script in layers.sh headers.sh sizes.sh top.sh words.sh; do
    expect "$script" passes "a tree that breaks no rule"
done

source_put src/base/extra.c '#include "table/table.h"'
breach layers.sh "base includes table"
source_put src/judge/extra.c '#include "write/write.h"'
breach layers.sh "judge includes write"
source_put src/write/extra.c '#include "judge/judge_internal.h"'
breach layers.sh "write includes the inside of judge"
source_put src/table/extra.c '#include "base/base_internal.h"'
breach layers.sh "table includes the inside of base"
source_put src/cli/extra.c '#include "base/base.h"'
breach layers.sh "cli includes base"
source_put src/include/fescue.h '#include "base/base.h"'
breach layers.sh "the public header includes base"
source_put src/table/extra.c '#include "extra.h"'
breach layers.sh "an include that names no folder"
source_put src/base/call.c 'int table_length(void);' 'int base_call(void);' 'int base_call(void)' '{' \
    '    return table_length();' '}'
source_put src/table/length.c 'int table_length(void);' 'int table_length(void)' '{' '    return 0;' '}'
for name in base/call table/length; do
    mkdir -p "$tree/build/src/${name%/*}"
    ${CC:-gcc} -c "$tree/src/$name.c" -o "$tree/build/src/$name.o"
done
breach layers.sh "base calls table without an include"
mkdir "$tree/src/odd"
source_put src/odd/odd.c '#include "base/base.h"'
breach layers.sh "a folder that has no place in the order"

source_put src/table/table.h 'size_t table_size(void);'
breach headers.sh "a header that needs another before it"
source_put src/include/fescue.h 'enum { fescue_trailing = 1 << 3 };' 'int fescue_new(int class);' 'extern char fescue_empty[0];'
breach headers.sh "a public header that is no strict C11"

# shellcheck disable=SC2046 # one line each
source_put src/table/long.c 'int table_long(void)' '{' "$(long_body 99)" '}'
breach sizes.sh "a function of 101 lines"
source_put src/table/long.c 'int table_long(void)' '{' "$(long_body 98)" '}'
expect sizes.sh passes "a function of 100 lines"
source_put src/table/long.c "$(long_body 799)"
breach sizes.sh "a file of 801 lines"

echo text >"$tree/NOTES"
breach top.sh "a file that does not belong at the top"
if command -v git >/dev/null 2>&1; then
    (cd "$tree" && git init -q && git add .)
    echo text >"$tree/NOTES"
    expect top.sh passes "a file that git does not track"
    (cd "$tree" && git add -f NOTES)
    breach top.sh "one that it does"
fi
rm "$tree/README.md"
breach top.sh "no README"

echo 'int table_bare;' >"$tree/src/table/bare.c"
breach words.sh "a source without the licence"
echo 'echo hello' >"$tree/scripts/bare"
breach words.sh "a script without the licence"
echo '.TH fescue 1' >"$tree/src/bare.1"
breach words.sh "a manual page without the licence"
for folder in home work root; do
    echo "see /$folder/notes" >"$tree/tests/notes.md"
    breach words.sh "a path under /$folder"
done
source_put src/table/later.c "/* TO""DO: all of it */"
breach words.sh "work left to be done"
source_put src/table/tab.c "$(printf '\tint x;')"
breach words.sh "a tab"

echo "1..$tests"
[ "$failures" -eq 0 ]
