#!/bin/sh
# SPDX-License-Identifier: MIT
#
# Where results go: the standard place, places that cannot be, places that hold something already.
. "$(dirname "$0")/library"

"$FESCUE" sow -q --rows 40 --columns 20 --seen 0.5 -o sown
mkdir tables tables/deep.mtx
for name in plain.mtx packed.mtx.gz levels.csv.gz bare twice.gz.gz deep.mtx/levels.csv deep.mtx/.mtx .gz a.tsv; do
    cp sown/table.mtx tables/$name
done

# ---- the standard place ---------------------------------------------------------------------------------------------
for pair in plain.mtx=plain packed.mtx.gz=packed levels.csv.gz=levels bare=bare twice.gz.gz=twice.gz \
    deep.mtx/levels.csv=deep.mtx/levels deep.mtx/.mtx=deep.mtx/.mtx .gz=.gz a.tsv=a; do
    try 0 fill -q --rank 1 "tables/${pair%%=*}"
    check "goes to ${pair#*=}-filled" test -f "tables/${pair#*=}-filled/run.json"
done
(cd tables && "$FESCUE" fill -q --rank 1 plain.mtx --seed 3)
check "a name without a folder" grep -q '"seed": "3"' tables/plain-filled/run.json

# ---- places that cannot be ------------------------------------------------------------------------------------------
echo text >file
for place in file file/below file/below/it; do
    try 73 fill sown/table.mtx -o $place
    says "$place: cannot hold the results: Not a directory"
    try 73 sow -o $place
    says "$place: cannot hold the results: Not a directory"
done
check "the file is as it was" test "$(cat file)" = text
mkdir -p taken/filled.mtx
try 74 fill sown/table.mtx -o taken
check "a folder in the way is named" grep -q '^fescue: taken/filled.mtx: ' err
check "nothing else is left there, but a checkpoint" test "$(ls -A taken | grep -v fescue-checkpoint)" = filled.mtx
long=$(printf '%0300d' 0)
try 73 fill sown/table.mtx -o "$long"
says "$long: cannot hold the results: File name too long"
if [ "$(id -u)" -ne 0 ]; then # the superuser may write anywhere
    mkdir locked
    chmod a-w locked
    try 73 fill sown/table.mtx -o locked
    says 'locked: cannot hold the results: Permission denied'
    try 73 fill sown/table.mtx -o locked/below
    says 'locked/below: cannot hold the results: Permission denied'
fi

# ---- places that hold something -------------------------------------------------------------------------------------
mkdir used
echo mine >used/notes.txt
try 0 fill -q --rank 1 sown/table.mtx -o used
check "what is not ours stays" test "$(cat used/notes.txt)" = mine
cp -r used before
try 0 fill -q --rank 1 --write factors sown/table.mtx -o used/
check "results of the older run that this one does not have are gone" test ! -e used/filled.mtx -a ! -e used/cells.csv
check "its factors are there" cmp used/left.mtx before/left.mtx
check "what is not ours stays again" test "$(cat used/notes.txt)" = mine
try 65 fill -q used/notes.txt -o used
check "a run that fails leaves the older one whole" test -f used/run.json -a -f used/left.mtx
check "no temporary file is left" test -z "$(ls -A used | grep '^\.')"

mkdir own
cp sown/table.mtx own/filled.mtx
for place in own own/ ./own own/../own; do
    try 64 fill own/filled.mtx -o $place
    says 'own/filled.mtx: the results would replace the table itself; give another directory with -o'
done
check "the table is as it was" cmp own/filled.mtx sown/table.mtx
cp sown/table.mtx own/levels.mtx
try 0 fill -q --rank 1 own/levels.mtx -o own
check "a table of another name may lie beside its results" cmp own/levels.mtx sown/table.mtx
finish
