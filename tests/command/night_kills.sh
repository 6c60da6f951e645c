#!/bin/sh
# SPDX-License-Identifier: MIT
#
# A night of 12 jobs, killed (SIGKILL: the night alone, or its children with it) at random instants and begun again each
# time until it is done: the results are those of an undisturbed night, byte for byte, every job was done once, and the
# ledger is sound. KILLS: how many times; SEED: of the instants, printed.
. "$(dirname "$0")/library"
: "${KILLS:=6}" "${ROWS:=60}" "${SEED:=$(date +%s)}"
echo "# $KILLS kills, seed $SEED"

mkdir in
for k in 1 2 3 4 5 6 7 8 9 10 11 12; do
    "$FESCUE" sow -q --rows "$ROWS" --columns 40 --rank 3 --noise 0.2 --seen 0.5 --truth factors -s $k -o sown
    mv sown/table.mtx in/t$k.mtx
done
cat >plan.ini <<'PLAN'
[night]
threads = 2
checkpoint-every = 0.05
folds = 2
[all]
input = in/t*.mtx
output = res/{name}
PLAN
mkdir calm wild
cp -r plan.ini in calm
cp -r plan.ini in wild
(cd calm && "$FESCUE" night -q plan.ini 2>../err)
verdict $? "an undisturbed night" err

cat >kills.py <<'PYTHON'
import os, random, signal, subprocess, sys, time
kills, seed, command = int(sys.argv[1]), int(sys.argv[2]), sys.argv[3:]
random.seed(seed)
done = 0
for n in range(20 * kills):
    whole = random.random() < 0.5
    run = subprocess.Popen(command, start_new_session=True, stderr=subprocess.DEVNULL)
    try:
        status = run.wait(timeout=random.uniform(0, 0.6) if done < kills else 300)
        if status == 0 and done >= kills:
            break
        if status == 0: # all was done before the last kill
            break
        if status != 1 and status != 75:
            sys.exit("status %d" % status)
    except subprocess.TimeoutExpired:
        (os.killpg if whole else os.kill)(run.pid, signal.SIGKILL)
        run.wait()
        done += 1
print("# killed %d times" % done)
sys.exit(subprocess.call(command, stderr=subprocess.DEVNULL))
PYTHON
(cd wild && "$PYTHON" ../kills.py "$KILLS" "$SEED" "$FESCUE" night -q plan.ini) >told 2>err
verdict $? "killed and begun again until it is done" err told
cat told
check "it was killed at all" grep -q 'killed [1-9]' told

for job in in/*; do
    name=$(basename "$job" .mtx)
    for file in calm/res/"$name"/*; do
        other=wild/res/$name/${file##*/}
        case $file in
        */run.json) sed '/"timing"/,$d' "$file" >a && sed '/"timing"/,$d' "$other" >b && cmp a b ;;
        *) cmp "$file" "$other" ;;
        esac || echo "$file"
    done >different 2>&1
    check "$name: the same bytes" is_empty different
    ls -A "calm/res/$name" >names
    check "$name: the same files, and nothing besides" eval "ls -A 'wild/res/$name' | diff names -"
done
"$PYTHON" - >rows 2>err <<'PYTHON'
import sqlite3
ledger = sqlite3.connect("wild/plan-ledger.db")
assert ledger.execute("PRAGMA integrity_check").fetchall() == [("ok",)]
done = dict(ledger.execute("SELECT job, count(*) FROM attempt WHERE state = 'done' GROUP BY job"))
assert len(done) == 12 and all(n == 1 for n in done.values()), done
assert ledger.execute("SELECT count(*) FROM attempt WHERE state IN ('running', 'failed')").fetchone() == (0,)
assert ledger.execute("SELECT count(*) FROM night WHERE state = 'running'").fetchone() == (0,)
assert ledger.execute("SELECT count(*) FROM attempt WHERE state = 'done' AND rmse IS NULL").fetchone() == (0,)
print(*ledger.execute("SELECT state, count(*) FROM attempt GROUP BY state"))
PYTHON
verdict $? "the ledger is sound, and every job was done once" err
sed 's/^/# /' rows
finish
