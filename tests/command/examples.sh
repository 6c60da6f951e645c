#!/bin/sh
# SPDX-License-Identifier: MIT
#
# The examples of README.md and of the manual pages run: each line that begins with "$ " in a code block, in order, in a
# folder of its own for each document, with the demo tables at hand. What installs, builds or tests is left out: it leads
# to this very test.
. "$(dirname "$0")/library"

mkdir bin
ln -s "$FESCUE" bin/fescue
PATH=$private/bin:$PATH
export PATH

of_readme() {
    awk '/^```/ { inside = !inside; next } (inside || /^    /) && sub(/^ *\$ /, "")' "$1"
}
of_manual() {
    awk '/^\.Sh/ { examples = ($2 == "EXAMPLES") } /^\.Bd/ { inside = examples } /^\.Ed/ { inside = 0 }
        inside && sub(/^\$ /, "") { gsub(/\\e/, "\\"); print }' "$1"
}

for document in "$root"/README.md "$root"/src/man/*.1; do
    name=$(basename "$document")
    case $name in
    *.md) of_readme "$document" ;;
    *) of_manual "$document" ;;
    esac | grep -vE '^(scripts/|make|git |cd |sudo |apt)' >examples
    check "$name has examples" test -s examples
    mkdir "in-$name"
    ln -s "$root/datasets-synthetic" "in-$name/datasets-synthetic"
    while IFS= read -r line; do
        (cd "in-$name" && sh -c "$line" </dev/null) >example.out 2>&1
        verdict $? "$name: $line" example.out
    done <examples
done
finish
