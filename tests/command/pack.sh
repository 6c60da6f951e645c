#!/bin/sh
# SPDX-License-Identifier: MIT
#
# Packed tables: every command takes them, with the same results; what is damaged or strange is refused with one line.
. "$(dirname "$0")/library"

"$FESCUE" sow -q --rows 300 --columns 120 --seen 0.3 -o sown
gzip -dc "$root/datasets-synthetic/cider-panel/table.csv.gz" >cider.csv
printf 'zeit;nord;s\303\274d\n2024-01-01;1,50;2\n2024-01-02;;-3,250\n2024-01-03;7; 8\n2024-01-04;1e1;+9\n' >comma.csv
printf 'who,what,points\nMere,amber,4.5\n"North, fen","deep ""red""",3.00\nMere,rust,007\nSluice,amber,1e0\n' >long.csv
printf 'row,column,value,weight\na,x,1.5,1\na,y,2,3\nb,x,2.50,0.5\nc,y,4,1\nc,x,3,2\n' >weighed.csv
printf '%%%%MatrixMarket matrix array real symmetric\n3 3\n1.0\nnan\n2.50\n4\n-0\n1\n' >square.mtx

# ---- the same results -------------------------------------------------------------------------------------------------
without_path() { # the record without paths and times
    "$PYTHON" -c '
import json, sys
record = json.load(open(sys.argv[1]))
del record["timing"], record["input"]["path"]
record["input"].pop("packed_from", None)
print(json.dumps(record, indent=1))' "$1"
}
alike() { # TABLE ARGUMENT...
    table_=$1
    shift
    try 0 pack "$table_" -o packs/$table_.pack
    check "$table_: it says what it packed" grep -q '^packed  .* cells seen' err
    check "and where" grep -qx "results in packs/$table_.pack" err
    try 0 fill -q "$table_" -o from-text "$@"
    try 0 fill -q packs/$table_.pack -o from-pack "$@"
    for file in from-text/*; do
        case $file in
        */run.json)
            without_path $file >text.json
            without_path from-pack/run.json >pack.json
            check "$table_: the same run.json, but for paths and times" cmp text.json pack.json
            ;;
        *) check "$table_: the same ${file#*/}" cmp $file from-pack/${file#*/} ;;
        esac
    done
    check "$table_: the record names the source" grep -q "\"packed_from\": \"$table_\"" from-pack/run.json
    check "$table_: no other file" test "$(ls from-text)" = "$(ls from-pack)"
    "$FESCUE" survey "$table_" --threads 1 | sed '1s/^[^:]*//; /^ *fescue fill /d' >text.survey
    "$FESCUE" survey - --threads 2 <packs/$table_.pack | sed '1s/^[^:]*//; /^ *fescue fill /d' >pack.survey
    check "$table_: the same survey, of a pack from standard input" cmp text.survey pack.survey
    rm -r from-text from-pack
}
cp sown/table.mtx sown.mtx
alike sown.mtx --rank 2
alike cider.csv --rank 2 --bounds 0:10
alike comma.csv --rank 0
alike long.csv --rank 0
alike square.mtx --rank 0
printf 'a,2\nb,1\nc,5\n' >rows.csv
alike weighed.csv --rank 0
alike weighed.csv --rank 0 --row-weights rows.csv
for threads in 1 2 5; do
    "$FESCUE" pack -q cider.csv --threads $threads -o threads-$threads.pack
    check "the same pack with $threads workers" cmp threads-$threads.pack packs/cider.csv.pack
done
try 0 pack -q packs/cider.csv.pack -o again.pack
check "a pack of a pack is the pack" cmp again.pack packs/cider.csv.pack
gzip -c again.pack >again.pack.gz
try 0 survey again.pack.gz
pipe_survey() {
    cat again.pack | "$FESCUE" survey -
}
tried 0 pipe_survey
check "nothing is lost in a pipe" grep -q '13052 of 216000 cells' out
try 0 fill -q again.pack --rank 1
check "the standard place goes by the name" test -f again-filled/run.json
try 0 pack -q sown.mtx --precision single -o single.pack
try 0 fill -q single.pack --precision single --rank 2 -o single-pack
try 0 fill -q sown.mtx --precision single --rank 2 -o single-text
check "single precision too" cmp single-pack/cells.csv single-text/cells.csv

# ---- refused ----------------------------------------------------------------------------------------------------------
"$PYTHON" - again.pack <<'PYTHON'
import sys
pack = open(sys.argv[1], "rb").read()
def put(name, data):
    open(name, "wb").write(data)
changed = bytearray(pack)
for place in range(600, 620, 4):
    changed[place] ^= 1
put("cells.bad", bytes(changed))
put("cut.bad", pack[:len(pack) // 2])
put("head.bad", pack[:100])
put("more.bad", pack + b"\0")
order = pack[16:20][::-1]
put("order.bad", pack[:16] + order + pack[20:])
put("version.bad", pack[:20] + (9).to_bytes(4, sys.byteorder) + pack[24:])
put("lines.bad", pack.replace(b"\r\n", b"\n"))
PYTHON
refused() { # FILE SENTENCE
    try 65 fill $1 -o results
    says "$1: $2"
    check "nothing was written" nothing_in results
}
size=$(wc -c <again.pack)
refused cells.bad "the pack is damaged: bytes 512 to 66047 are not what was written"
refused cut.bad "the pack has $(($size / 2)) bytes, its header tells of $size: it is truncated or something follows"
refused head.bad 'the pack is truncated after 100 bytes'
refused more.bad "the pack has $(($size + 1)) bytes, its header tells of $size: it is truncated or something follows"
refused order.bad 'the pack was written by a machine of the other byte order; pack the table again on this one'
refused version.bad 'the pack has version 9, this program reads version 2; pack the table again'
try 65 survey lines.bad
try 65 survey single.pack
says 'single.pack: the pack holds values in single precision; read it with --precision single, or pack the table again with --precision double'
try 65 survey again.pack --format wide
says 'again.pack: a packed table was found, but --format asks for a text'

# ---- places -----------------------------------------------------------------------------------------------------------
try 66 pack missing -o missing.pack
check "no pack of nothing" nothing_in missing.pack
try 64 pack cider.csv -o cider.csv
says 'cider.csv: the pack would replace the table itself; give another name with -o'
try 64 pack cider.csv -o ./packs/../cider.csv
mkdir folder
try 73 pack cider.csv -o folder
says 'folder: cannot hold the results: Is a directory'
try 73 pack cider.csv -o folder/
try 73 pack cider.csv -o cider.csv/below
says 'cider.csv: cannot hold the results: Not a directory'
check "the table is as it was" test "$(wc -l <cider.csv)" -eq 13053
try 0 pack -q cider.csv -o new/deep/x.pack
check "folders are made" cmp new/deep/x.pack again.pack
check "no temporary file is left" test "$(ls -A new/deep)" = x.pack
printf 'row,column,value\na,b,1\na,b,2\nb,b,4\n' >twice.csv
try 65 pack twice.csv -o twice.pack
check "no pack of what is refused" nothing_in twice.pack
try 0 pack -q twice.csv --duplicates mean -o twice.pack
"$FESCUE" survey twice.pack >out
check "what was merged when it was packed is told" grep -q 'more than once' out
finish
