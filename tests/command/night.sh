#!/bin/sh
# SPDX-License-Identifier: MIT
#
# fescue night: jobs, limits, the ledger, what is not done again, and the summaries.
. "$(dirname "$0")/library"

for k in 1 2 3; do
    "$FESCUE" sow -q --rows 40 --columns 30 --rank 2 --seen 0.6 -s $k -o sown
    mkdir -p in
    mv sown/table.mtx "in/t$k.mtx"
done
printf 'name,a,b\n<b>x</b>,1,2\ny,3,\n' >'in/odd.csv'
cat >plan.ini <<'PLAN'
[night]
rank = 2
threads = 2
[all]
input = in/t*.mtx
output = res/{name}
[last]
input = in/t1.mtx
output = res/last
rank = 1
after = all
PLAN

ledger() { # QUESTION
    "$PYTHON" -c 'import sqlite3, sys
for row in sqlite3.connect(sys.argv[1]).execute(sys.argv[2]): print(*row, sep="|")' plan-ledger.db "$1"
}

try 0 night --list plan.ini
check "the list names every job" test "$(grep -c -- '->' out)" -eq 4
check "and does nothing" test ! -e plan-ledger.db
try 0 night --history plan.ini
check "no night yet" grep -qx 'no night yet' out
try 0 night plan.ini
check "nothing on standard output" is_empty out
check "all jobs are done" grep -q 'plan.ini: 4 jobs: 4 done' err
for job in t1 t2 t3 last; do
    check "$job has its results" test -e res/$job/run.json
    check "$job keeps no lock" test ! -e res/$job/.fescue-lock
done
"$FESCUE" fill -q --rank 2 in/t2.mtx -o alone
check "the results are those of fill" cmp res/t2/filled.mtx alone/filled.mtx
check "the ledger has an attempt a job" test "$(ledger "SELECT count(*) FROM attempt WHERE state='done'")" = 4
check "the ledger is sound" test "$(ledger 'PRAGMA integrity_check')" = ok
check "what waits is begun last" test "$(ledger 'SELECT job FROM attempt ORDER BY number DESC LIMIT 1')" = last
check "the ledger has figures" test "$(ledger "SELECT count(*) FROM attempt WHERE rmse > 0 AND rank >= 1
    AND missing > 0.3 AND memory > 1000000 AND seconds > 0 AND exit = 0 AND options LIKE '%rank=%'
    AND length(input_sum) = 8 AND version <> '' AND seed = 1")" = 4
for name in summary.txt index.html night.json; do
    check "$name is there" test -s plan-morning/$name
done
check "the page links the results" grep -q 'href="../res/t1/filled.mtx"' plan-morning/index.html
check "night.json is JSON and says so" "$PYTHON" -c 'import json
n = json.load(open("plan-morning/night.json"))
assert n["exit"] == 0 and len(n["jobs"]) == 4 and all(j["state"] == "done" for j in n["jobs"]), n
assert all(j["figures"]["rmse"] > 0 for j in n["jobs"])'

# ---- what is done is not done again -----------------------------------------------------------------------------------
cp -r res before
try 0 night plan.ini
check "unchanged jobs are not run" grep -q '4 jobs: 4 unchanged' err
check "and their results stay" diff -r before res
sed -i 's/^rank = 1$/rank = 0/' plan.ini
"$FESCUE" sow -q --rows 40 --columns 30 --rank 2 --seen 0.6 -s 7 -o sown
mv sown/table.mtx in/t2.mtx
try 0 night plan.ini
check "another input or other options are run" grep -q '4 jobs: 2 done, 2 unchanged' err
rm res/t3/run.json
try 0 night plan.ini
check "results that are gone are made again" grep -q '4 jobs: 1 done, 3 unchanged' err
try 0 night --again plan.ini
check "--again runs all" grep -q '4 jobs: 4 done' err
try 0 night --history plan.ini
check "the history has five nights" test "$(grep -c '^night' out)" -eq 5

# ---- drift ------------------------------------------------------------------------------------------------------------
cat >drift.ini <<'PLAN'
[steady]
input = in/drift.mtx
rank = 2
folds = 0
PLAN
cp in/t1.mtx in/drift.mtx
for k in 1 2 3 4 5 6; do "$FESCUE" night -q --again drift.ini; done
try 0 night --again drift.ini
denied "the same again is not unusual" grep -q unusual err
cp in/t3.mtx in/drift.mtx
try 0 night drift.ini
check "another subspace is" told 'unusual: .*angle to the last subspace [0-9.]*, usually'
check "the ledger has the angles" "$PYTHON" -c 'import sqlite3
angles = [r[0] for r in sqlite3.connect("drift-ledger.db").execute("SELECT angle FROM attempt ORDER BY number")]
assert angles[0] is None and max(angles[1:7]) < 1e-6 and angles[7] > 0.2, angles'

# ---- what fails, fails alone ------------------------------------------------------------------------------------------
cat >mixed.ini <<'PLAN'
[gone]
input = in/nothing.csv
[after gone]
input = in/t1.mtx
after = gone
[odd<&]
PLAN
try 64 night mixed.ini
says 'mixed.ini: line 6: found the section [odd<&], expected a name of letters, digits, blanks, - _ and .'
sed -i '$d' mixed.ini
cat >>mixed.ini <<'PLAN'
[small]
input = in/t1.mtx
output = <i>res
[bad]
input = in/bad.csv
[tight]
input = in/t2.mtx
memory = 100K
PLAN
printf 'a,b,c,d\nx,1,<script>,3\n' >in/bad.csv
try 1 night mixed.ini
check "one is done" grep -q '5 jobs: 1 done, 3 failed, 1 skipped' err
check "a table that is not there is named" told 'in/nothing.csv: cannot be opened'
check "what comes after it is skipped" told 'not begun: it comes after gone, which failed'
check "a bad cell is told" grep -q 'in/bad.csv: line 2' err
check "too little memory is told" told 'would pass the memory limit of 100 kB'
check "the summary fits a mail" test "$(awk 'length > w { w = length } END { print w }' mixed-morning/summary.txt)" -le 80
check "nothing of a page is taken from a table" test "$(grep -c '<script>\|<i>' mixed-morning/index.html)" -eq 0
check "the words are there all the same" grep -q '&lt;script&gt;' mixed-morning/index.html
check "night.json says why" "$PYTHON" -c 'import json
n = {j["job"]: j for j in json.load(open("mixed-morning/night.json"))["jobs"]}
assert n["gone"]["exit"] == 66 and n["bad"]["exit"] == 65 and n["tight"]["exit"] == 71, n
assert n["after gone"]["state"] == "skipped" and n["small"]["state"] == "done", n'

# ---- time -------------------------------------------------------------------------------------------------------------
"$FESCUE" sow -q --rows 1500 --columns 900 --rank 12 --noise 1 --seen 0.3 --truth factors -o large
cat >short.ini <<'PLAN'
[night]
for = 0.6
tolerance = 0
iterations = 1000000
solver = fixed-rank-cg
[large]
input = large/table.mtx
[later]
input = in/t1.mtx
after = large
PLAN
try 75 night short.ini
check "a night that is over stops its jobs" grep -q '2 jobs: 1 stopped, 1 waiting' err
check "nothing of the stopped one is there" test ! -e large/table-filled/run.json
cat >dead.ini <<'PLAN'
[large]
input = large/table.mtx
deadline = 0.1
PLAN
try 0 night dead.ini
check "a deadline ends the fits" told 'the time limit ended it before it was done'
check "with a result" test -e large/table-filled/run.json

cat >haste.ini <<'PLAN'
[haste]
input = in/t1.mtx
folds = 5
PLAN
try 0 night haste.ini
echo 'deadline = 0.01' >>haste.ini
try 0 night --again haste.ini
check "when time is short cross-validation shrinks" told '[0-9] folds of cross-validation, for want of time'
check "and the record says so" grep -q '"folds": "[02]"' in/t1-filled/run.json
check "as do ledger and night.json" "$PYTHON" -c 'import json, sqlite3
told = sqlite3.connect("haste-ledger.db").execute("SELECT shrunk FROM attempt ORDER BY number DESC").fetchone()[0]
job = json.load(open("haste-morning/night.json"))["jobs"][0]
assert told.endswith("for want of time") and job["shrunk"] == told, (told, job)'

# ---- what has no file today, and places of two spellings --------------------------------------------------------------
printf '[some]\ninput = in/*.nothing\n[one]\ninput = in/t1.mtx\noutput = ./res//t1/\n[gone]\ninput = in/gone.mtx\n' >odd.ini
try 0 night --list odd.ini
check "wildcards without a file are told" grep -qF '[some]: no file matches in/*.nothing' out
check "a place has one spelling" grep -qF 'in/t1.mtx -> res/t1' out
check "an input that is not there is told" grep -q 'gone.* (the input cannot be read now)' out

# ---- the sample plan --------------------------------------------------------------------------------------------------
ln -s "$root/datasets-synthetic" datasets-synthetic
cp "$root/scripts/sample-plan.ini" sample.ini
try 0 night --list sample.ini
check "the sample plan has its jobs" grep -q 'cider-panel .*, after fen-levels' out

# ---- locks ------------------------------------------------------------------------------------------------------------
# A job that outlasts by far what the second night waits for the first.
cat >long.ini <<'PLAN'
[large]
input = large/table.mtx
solver = subgradient
rank = 12
tolerance = 0
iterations = 1000000
PLAN
"$FESCUE" night long.ini 2>first &
child=$!
n=0
until [ -s long-ledger.lock ] || [ $n -gt 100 ]; do sleep 0.05; n=$((n + 1)); done
try 73 night long.ini
check "two nights of one plan do not run at once" grep -q "long.ini: process $child is at work on it" err
kill -9 $child
wait $child 2>/dev/null
check "the dead one's lock is there" test -e long-ledger.lock
try 75 night long.ini --for 0.3
check "and is taken over" test ! -e long-ledger.lock
finish
