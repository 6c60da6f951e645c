#!/bin/sh
# SPDX-License-Identifier: MIT
#
# The order of the folders: each may use those before it, none after it.
#
#     base table numeric manifold model solve judge write job night   and cli, which sees fescue.h alone
#
# Looked at twice: in the includes, and, where objects are built, in who calls whom. The inside of a folder
# (x_internal.h) stays in it. write may know judge's types, since it writes them, and calls nothing of it.
#
# Calls that are let pass, by name, since they only read: from write, what judge's result says of a cell; the tables of
# options, which fescue.h shows to everyone.
. "$(dirname "$0")/common"

readers='basis_word determined_basis judgement_halfwidth judge_levels fescue_option_table fescue_option_text'
order='base table numeric manifold model solve judge write job night cli'

# Lines "FILE FOLDER INCLUDED".
includes=$(tracked 'src/*.c' 'src/*.h' | while IFS= read -r file; do
    folder=${file#src/}
    folder=${folder%%/*}
    sed -n 's/^[[:space:]]*#[[:space:]]*include[[:space:]]*"\([^"]*\)".*/\1/p' "$file" |
        sed "s|^|$file $folder |"
done)

verdict "every folder of src has its place in the order" "$(printf '%s\n' "$includes" |
    awk -v order="$order include man" '
    BEGIN { n = split(order, name, " "); for (k = 1; k <= n; k++) place[name[k]] = k }
    NF && !($2 in place) && !told[$2]++ { print $2 }')"

verdict "no folder includes a later one" "$(printf '%s\n' "$includes" | awk -v order="$order" '
    BEGIN { n = split(order, name, " "); for (k = 1; k <= n; k++) place[name[k]] = k }
    index($3, "/") {
        from = $3; sub("/.*", "", from)
        if (!(from in place) || place[from] > place[$2]) print $1 " includes " $3
    }
    !index($3, "/") && $3 !~ /^fescue(_[a-z_]*)?\.(h|def)$/ && $2 != "cli" {
        print $1 " includes " $3 ", which names no folder"
    }')"

verdict "the inside of a folder is seen there alone" "$(printf '%s\n' "$includes" | awk '
    $3 ~ /_internal\.h$/ {
        from = $3
        if (!sub("/.*", "", from)) from = $2
        if (from != $2) print $1 " includes " $3
    }')"

verdict "cli includes fescue.h and its own headers only" "$(printf '%s\n' "$includes" | awk '
    $2 == "cli" && $3 != "fescue.h" && $3 !~ /^(cli\/)?[a-z_]+\.h$/ { print $1 " includes " $3 }')"

verdict "the public headers include none of ours" "$(printf '%s\n' "$includes" | awk '
    $2 == "include" && $3 !~ /^fescue_[a-z_]*\.def$/ { print $1 " includes " $3 }')"

verdict "judge does not include write, and write of judge only judge.h" "$(printf '%s\n' "$includes" | awk '
    $2 == "judge" && $3 ~ /^write\// || $2 == "write" && $3 ~ /^judge\// && $3 != "judge/judge.h" {
        print $1 " includes " $3
    }')"

# Lines "FOLDER U|D SYMBOL": wanted and defined by the objects of a folder.
symbols=$(for folder in $order; do
    for object in "${BUILD:-build}/src/$folder"/*.o; do
        source=src/$folder/$(basename "$object" .o).c
        [ -e "$object" ] && [ -e "$source" ] || continue
        nm -P -g "$object" | awk -v folder="$folder" '{ print folder, ($2 == "U" ? "U" : "D"), $1 }'
    done
done)
if [ -n "$symbols" ]; then
    calls=$(printf '%s\n' "$symbols" | awk -v order="$order" -v readers="$readers" '
        BEGIN {
            n = split(order, name, " "); for (k = 1; k <= n; k++) place[name[k]] = k
            n = split(readers, name, " "); for (k = 1; k <= n; k++) reads[name[k]] = 1
        }
        $2 == "D" { home[$3] = $1 }
        $2 == "U" { wants[$1 " " $3] = 1 }
        END {
            for (want in wants) {
                split(want, part, " ")
                from = part[1]; to = home[part[2]]
                if (to == "") continue
                if ((place[to] > place[from] || (from == "write" && to == "judge")) && !(part[2] in reads))
                    print from " calls " part[2] " of " to
                if (from == "cli" && to != "cli" && part[2] !~ /^fescue_/)
                    print from " calls " part[2] " of " to ", which is not public"
            }
        }' | sort)
    verdict "no object calls into a later folder, write none of judge, cli none but the public ones" "$calls"
fi
finish
