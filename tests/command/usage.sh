#!/bin/sh
# SPDX-License-Identifier: MIT
#
# What the command line takes, and what is said of the rest: status 64, one line, nothing on standard output.
. "$(dirname "$0")/library"

misuse() { # SENTENCE ARGUMENT...
    sentence_=$1
    shift
    try 64 "$@"
    says "$sentence_"
    check "nothing on standard output" is_empty out
}

misuse 'no command given; "fescue --help" lists them'
misuse 'there is no command "mow"; "fescue --help" lists them' mow
misuse 'there is no command "--mow"; "fescue --help" lists them' --mow
misuse 'there is no command "--version"; "fescue --help" lists them' --version now
misuse 'fill needs a TABLE; "-" is standard input' fill
misuse 'survey needs a TABLE; "-" is standard input' survey
misuse 'fill takes one TABLE, found a second: "b"' fill a b
misuse 'fill takes one TABLE, found a second: "--rank"' fill a -- --rank
misuse 'sow takes no argument, found "table"' sow table
misuse 'sow needs to be told where the table and its truth go: -o DIR' sow
misuse 'night needs a PLAN' night
misuse '--threads: found "none", expected a whole number from 1 to 1024, or auto' night --threads none plan.ini
misuse 'pack needs a TABLE; "-" is standard input' pack -o file
misuse 'pack needs to be told where the packed table goes: -o FILE' pack table
misuse '--output: found "", expected the name of a file' pack --output= table
misuse 'pack takes no option --rank; "fescue pack --help" lists them' pack --rank 3 table -o file
misuse 'fill takes no option --rnk; is --rank meant?' fill --rnk 3 table
misuse 'fill takes no option --hold; is --holdout meant?' fill --hold=0.2 table
misuse 'fill takes no option --scenery; "fescue fill --help" lists them' fill --scenery table
misuse 'survey takes no option --rank; "fescue survey --help" lists them' survey --rank 3 table
misuse 'fill takes no option -Z; "fescue fill --help" lists them' fill -Z table
misuse 'fill takes no option -Z; "fescue fill --help" lists them' fill -qZ table
misuse '--rank: found nothing, expected a value' fill table --rank
misuse '-r: found nothing, expected a value' fill table -r
misuse '--quiet takes no value' fill --quiet=yes table
misuse '--output: found "", expected the name of a directory' fill --output= table
misuse '--rank: found "many", expected a whole number from 0 to 256, or auto' fill --rank many table
misuse '--rank: found "257", expected a whole number from 0 to 256, or auto' fill -r257 table
misuse '--holdout: found "0.6", expected a number from 0 to 0.5' fill --holdout=0.6 table
misuse '--strict: found "perhaps", expected yes, no, or nothing for yes' fill --strict=perhaps table
misuse '--offsets: found "all", expected auto, both, rows, columns, mean or none' fill --offsets all table
misuse 'there is no command "mow?[31m"; "fescue --help" lists them' "mow$(printf '\033[31m')"
misuse 'a table from standard input has no name to derive one from; say where results go with -o DIR' fill -

# ---- help and version -------------------------------------------------------------------------------------------------
try 0 --version
check "the version is that of the header" grep -qx "fescue $(sed -n 's/^#define FESCUE_VERSION "\(.*\)"/\1/p' \
    "$root/src/include/fescue.h")" out
check "and nothing else" is_empty err
for arguments in --help 'fill --help' 'survey -h' 'rank --help' 'sow --help' 'night -h' 'pack --help' 'fill --rank 3 --help'; do
    try 0 $arguments
    check "on standard output" grep -q '^usage: fescue' out
    check "nothing on standard error" is_empty err
    denied "no line is wider than 100" grep -qE '^.{101}' out
done

# Every option of the lists is in the help of the commands that it belongs to, and only there.
for command in fill:FESCUE_FOR_FILL:options rank:FESCUE_FOR_RANK:options survey:FESCUE_FOR_SURVEY:options sow:FESCUE_FOR_SOW:sow_options \
    night:FESCUE_FOR_NIGHT:night_options pack:FESCUE_FOR_PACK:options; do
    name=${command%%:*}
    flag=${command#*:}
    flag=${flag%:*}
    list=$root/src/include/fescue_${command##*:}.def
    grep '^OPTION' "$list" | grep "$flag" | sed 's/^[^"]*"\([^"]*\)".*/--\1/' | sort >wanted
    printf '%s\n' --quiet --verbose --help >>wanted
    sort -o wanted wanted
    "$FESCUE" "$name" --help | sed -n 's/^  \(-., \)\{0,1\} *\(--[a-z-]*\).*/\2/p' | sort >got
    check "$name --help lists its options" diff wanted got
    check "there are some" test "$(wc -l <got)" -gt 5
done
finish
