#!/bin/sh
# SPDX-License-Identifier: MIT
#
# Tables that cannot be read: status 65 for malformed ones and 66 for those that are not there; one line that names
# file, line, what was found and what was expected; nothing is written.
. "$(dirname "$0")/library"

unread() { # STATUS SENTENCE FILE [ARGUMENT...]
    status_=$1 sentence_=$2
    shift 2
    try "$status_" fill -o results "$@"
    says "$sentence_"
    check "nothing was written" nothing_in results
}
malformed() { # SENTENCE CONTENT [ARGUMENT...]: both as printf takes them
    sentence_=$1
    printf "$2" >bad
    shift 2
    unread 65 "bad: $(printf "$sentence_")" bad "$@"
}

# ---- not there --------------------------------------------------------------------------------------------------------
mkdir folder
unread 66 'missing: cannot be opened: No such file or directory' missing
unread 66 'folder: cannot be read: Is a directory' folder
unread 66 'folder/missing/: cannot be opened: No such file or directory' folder/missing/
unread 66 ': cannot be opened: No such file or directory' ''

# ---- no table at all --------------------------------------------------------------------------------------------------
malformed 'the input is empty, a table was expected' ''
malformed 'line 1: no comma, semicolon or tab was found, fields separated by one of them were expected' '\n\n'
malformed 'line 1: a zip archive (or a spreadsheet) was found; save it as delimited text' 'PK\003\004 and so on'

# ---- Matrix Market: the header ----------------------------------------------------------------------------------------
head='%%%%MatrixMarket matrix coordinate real general\n'
array='%%%%MatrixMarket matrix array real general\n'
of() { # FORM FIELD SYMMETRY
    printf '%%%%%%%%MatrixMarket matrix %s %s %s\\n' "$@"
}
malformed "line 1: complex values were found, real ones were expected: a table is filled with real numbers; real and \
imaginary parts can be filled as two tables" "$(of coordinate complex general)1 1 1\n1 1 1 2\n"
malformed "line 1: a pattern was found, values were expected: it says where cells are and not what they hold, so there \
is nothing to fill from" "$(of coordinate pattern general)1 1 1\n1 1\n"
malformed "line 1: 'hermitian' was found, 'general', 'symmetric' or 'skew-symmetric' was expected" \
    "$(of coordinate real hermitian)1 1 1\n1 1 1\n"
malformed "line 1: 'list' was found, 'coordinate' or 'array' was expected" "$(of list real general)1 1 1\n1 1 1\n"
malformed "line 1: '%%%%MatrixMarket matrix coordinate real' was found, '%%%%MatrixMarket matrix coordinate real general' \
or the like was expected" '%%%%MatrixMarket matrix coordinate real\n1 1 1\n1 1 1\n'
malformed 'line 2: the file ends here, a line with the sizes of the table was expected' "$head%%%% a remark\n"
malformed "line 3: '3 x 4' was found, the numbers of rows, columns and entries were expected" "$head%%%% a remark\n3 x 4\n"
malformed "line 2: '3 4' was found, the numbers of rows, columns and entries were expected" "${head}3 4\n1 1 1\n"
malformed "line 2: '99999999999999999999 4 1' was found, the numbers of rows, columns and entries were expected" \
    "${head}99999999999999999999 4 1\n1 1 1\n"
malformed 'line 2: 5000000000 rows and 4 columns were found, at most 4294967294 of each are possible' \
    "${head}5000000000 4 1\n1 1 1\n"
malformed 'line 2: a table of 0 rows and 4 columns has no cells' "${head}0 4 0\n"
malformed 'line 2: 2 rows and 3 columns were found, a symmetric table has as many rows as columns' \
    "$(of coordinate real symmetric)2 3 1\n1 1 1\n"

# ---- Matrix Market: entries -------------------------------------------------------------------------------------------
malformed 'line 4: the file ends here after 2 of the 3 entries that its header promises' "${head}9 9 3\n1 1 1\n2 2 2\n"
malformed "line 5: '3 3 3' was found after all 2 entries that the header promises, the end of the file was expected" \
    "${head}9 9 2\n1 1 1\n2 2 2\n3 3 3\n"
malformed 'line 3: row 0 is outside 1..9' "${head}9 9 1\n0 1 1\n"
malformed 'line 3: row 10 is outside 1..9' "${head}9 9 1\n10 1 1\n"
malformed 'line 3: column 12 is outside 1..9' "${head}9 9 1\n1 12 1\n"
malformed 'line 3: row -1 is outside 1..9' "${head}9 9 1\n-1 1 1\n"
malformed 'line 3: row 99999999999999999999 is outside 1..9' "${head}9 9 1\n99999999999999999999 1 1\n"
malformed "line 3: the value 'many' is not a number" "${head}9 9 1\n1 1 many\n"
malformed "line 3: the value 'nan' is not a number; in this form a hole is left out" "${head}9 9 1\n1 1 nan\n"
malformed "line 3: the value 'inf' is not finite" "${head}9 9 1\n1 1 inf\n"
malformed "line 3: the value '1e999' is too large for a double" "${head}9 9 1\n1 1 1e999\n"
malformed "line 3: '1 1' was found, row, column and value were expected" "${head}9 9 1\n1 1\n"
malformed "line 3: '1 1 1 1' was found, row, column and value were expected" "${head}9 9 1\n1 1 1 1\n"
malformed "line 3: the value '1.5' is not an integer, as the header promises" \
    "$(of coordinate integer general)9 9 1\n1 1 1.5\n"
malformed "line 5: row 1, column 1 was given on line 3 already; --duplicates mean, last or first takes a cell that comes \
more than once" "${head}9 9 3\n1 1 1\n2 2 2\n1 1 3\n"
malformed 'line 3: row 1, column 2 lies above the diagonal; a symmetric file holds the lower triangle alone' \
    "$(of coordinate real symmetric)3 3 1\n1 2 1\n"
malformed 'line 3: row 1, column 1 lies on the diagonal, which is zero in a skew-symmetric table and left out' \
    "$(of coordinate real skew-symmetric)3 3 1\n1 1 1\n"
malformed 'line 5: the file ends here after 3 of the 4 entries that its header promises' "${array}2 2\n1\n2\n3\n"
malformed "line 7: '5' was found after all 4 entries that the header promises, the end of the file was expected" \
    "${array}2 2\n1\n2\n3\n4\n5\n"
malformed "line 5: the value 'x' is not a number" "${array}2 2\n1\n2\nx\n4\n"
malformed "line 5: the value 'inf' is not finite" "${array}2 2\n1\n2\ninf\n4\n"
malformed 'the table has no observed cell' "${head}3 3 0\n"
malformed 'the table has no observed cell' "${array}1 2\nnan\nnan\n"
malformed "the header promises 4000000000 rows and 4000000000 columns, but only 2 cells are observed: nearly every one \
of them would be empty" "${head}4000000000 4000000000 2\n1 1 1\n2 2 2\n"

# ---- delimited text ---------------------------------------------------------------------------------------------------
number='a number, or nothing, NA, NaN or null for a hole, was expected'
wide='t,a,b,c\nx,1,2,3\n'
malformed "line 1: three columns may be a wide table of two columns or a long one of row, column and value; --format wide \
or --format long says which it is" 't,a,b\nx,1,2\n'
malformed 'line 3: 3 fields were found, 4 were expected, as in the first line' "${wide}y,1,2\n"
malformed 'line 3: 5 fields were found, 4 were expected, as in the first line' "${wide}y,1,2,3,4\n"
malformed "line 3: the value 'soon' is not a number; $number" "${wide}y,1,soon,3\n"
malformed "line 3: the value 'inf' is not a number; $number" "${wide}y,1,inf,3\n"
malformed "line 3: the value '?[31m' is not a number; $number" "${wide}y,1,\033[31m,3\n"
malformed "line 3: the value '1e999' is too large for a double" "${wide}y,1,1e999,3\n"
malformed "line 3: the label 'x' of row 2 is that of row 1 already; every label was expected once" "${wide}x,1,2,3\n"
malformed "line 1: the label 'b' of column 3 is that of column 2 already; every label was expected once" \
    't,a,b,b\nx,1,2,3\n'
malformed 'line 1: the label of a column is empty' 't,a,,c\nx,1,2,3\n'
malformed 'line 3: the label of a row is empty' "${wide},1,2,3\n"
malformed 'line 2: a quote is opened here and never closed' 't,a,b,c\nx,"1,2,3\ny,1,2,3\n'
malformed 'line 3: a closing quote is not followed by a separator' "${wide}\"y\"z,1,2,3\n"
malformed 'line 3: a zero byte was found, where text was expected' "${wide}\\000,1,2,3\n"
malformed "line 3: the label of a row holds the byte 0xff, which is not UTF-8; the text can be converted, for instance \
with iconv" "${wide}\\377,1,2,3\n"
malformed 'the table has no observed cell' 't,a,b,c\nx,,NA,\ny,null,NaN,\n'
long='row,column,value\na,b,1\n'
malformed "line 3: the value 'soon' is not a number; $number" "${long}a,c,soon\n"
malformed 'line 3: 2 fields were found, row, column and value were expected' "${long}a,c\n"
malformed "line 3: row a, column b was given on line 2 already; --duplicates mean, last or first takes a cell that comes \
more than once" "${long}a,b,3\n"
malformed "line 2: the weight '-2' is not positive; a positive number was expected" 'row,column,value,weight\na,b,1,-2\n'
malformed "line 3: the value '1.500' has a decimal point, but line 2 has a decimal comma" 't;a;b;c\nx;1,5;2;3\ny;1.500;2;3\n'
malformed "line 2: the value '1e39' is too large for single precision" 't,a,b,c\nx,1,1e39,3\n' --precision single

# ---- gzip -------------------------------------------------------------------------------------------------------------
printf "${long}a,c,2\n" | gzip -nc >whole.gz
head -c 40 whole.gz >bad
unread 65 'bad: line 4: the gzip data end in the middle: the file is truncated after 40 bytes' bad
{ head -c -8 whole.gz; printf 'xxxxyyyy'; } >bad
unread 65 'bad: line 4: the gzip check sum or length does not match what was inflated: the file is damaged' bad
{ head -c 20 whole.gz; printf '\377\377\377\377\377'; tail -c +26 whole.gz; } >bad
unread 65 'bad: line 1: the gzip data are damaged (invalid distance)' bad
{ cat whole.gz; printf junk; } >bad
unread 65 'bad: line 4: the gzip data are followed by bytes that are not gzip' bad
finish
