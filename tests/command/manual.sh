#!/bin/sh
# SPDX-License-Identifier: MIT
#
# The manual pages: sound mdoc, and OPTIONS that agree with the option table, which the help text is made of: the same
# names and letters, every word an option takes, and its standard value.
. "$(dirname "$0")/library"

for page in "$root"/src/man/*.[15]; do
    name=$(basename "$page")
    (cd "$root/src/man" && mandoc -Tlint "$name") >lint 2>&1 # there it finds the pages that are referred to
    check "$name: mandoc finds no fault" is_empty lint
    check "$name: and renders it" test "$(mandoc -Tutf8 "$page" | wc -l)" -gt 20
done

# "letter name" of each option of a page, and what is said of it in one line a piece.
documented() { # PAGE
    awk '/^\.Sh/ { inside = ($2 == "OPTIONS") }
        inside && /^\.It/ { letter = ($2 == "Fl" && $3 != "Fl") ? $3 : "-"
            for (k = 2; k < NF; k++) if ($k == "Fl" && $(k + 1) == "Fl") name = $(k + 2)
            print letter, name }' "$1"
}
item() { # PAGE NAME
    awk -v name="$2" '/^\.Sh/ { inside = ($2 == "OPTIONS"); wanted = 0 }
        inside && /^\.(It|El)/ { wanted = index($0 " ", "Fl Fl " name " ") > 0 }
        inside && wanted' "$1" | sed 's/[.,;:]$//; s/ [.,;:]//g'
}

for command in fill rank survey sow night pack; do
    page=$root/src/man/fescue-$command.1
    "$FESCUE" $command --help >help
    sed -n 's/^  \(.\)\(.\)[ ,]*\(--[a-z-]*\).*/\2 \3/p' help | sed 's/^  *--/- /; s/ --/ /' | sort >wanted
    documented "$page" | sort >got
    check "$command: the options, with their letters" diff wanted got
    check "$command: there are some" test "$(wc -l <got)" -gt 5

    list=$root/src/include/fescue_options.def
    [ $command != sow ] || list=$root/src/include/fescue_sow_options.def
    [ $command != night ] || list=$root/src/include/fescue_night_options.def
    flag=FESCUE_FOR_$(echo $command | tr a-z A-Z)
    grep '^OPTION' "$list" | grep "$flag" >lines
    while IFS= read -r line; do
        field() { printf '%s\n' "$line" | sed 's/^OPTION(//; s/", "/","/' | cut -d, -f"$1" | sed 's/^ *"\{0,1\}//; s/" *$//'; }
        name=$(field 3)
        standard=$(field 6)
        words=$(field 9)
        [ "$command $name" != "pack output" ] || words=FILE # which is a file here, a directory elsewhere
        item "$page" "$name" >item
        [ "$(field 2)" = flag ] || case $standard in
        NULL) ;;
        *) check "$command --$name: standard $standard" grep -qE "(^|[ ,(])$(printf '%s' "$standard" | sed 's/\./\\./g')([ ,;]|$)" item ;;
        esac
        case $words in
        *'|'*)
            for word in $(echo "$words" | tr '|' ' '); do
                check "$command --$name: takes $word" grep -qE "(^| )$word( |$)" item
            done
            ;;
        NULL) ;;
        *) for part in $(echo "$words" | tr ':' ' '); do
            check "$command --$name: value $part" grep -q "Ar $part" item
        done ;;
        esac
    done <lines
done

# The exit status of fescue.1 are those of the list.
sed -n 's/^    X(FESCUE_[A-Z_]*, \([0-9]*\), "\(.*\)").*/\1 \2/p' "$root/src/include/fescue.h" >wanted
awk '/^\.Sh/ { inside = ($2 == "EXIT") } inside && /^\.It/ { code = $2; getline; print code, $0 }' \
    "$root/src/man/fescue.1" >got
check "fescue.1 has the list of exit statuses" diff wanted got
check "there are some" test "$(wc -l <got)" -gt 5
finish
