#!/bin/sh
# SPDX-License-Identifier: MIT
#
# Checkpoints: a fill that is stopped again and again and started again, with another number of workers each time, ends
# with the bytes of one that was not, whichever solver it has; a checkpoint of another run, and a broken one, are told
# and not used. SOLVERS: further ones to go through by name (tests/unit/test_run_resume.c has all of them, step by step).
. "$(dirname "$0")/library"

: "${SOLVERS:=}"

# Everything but "timing", which ends the record.
same() { # A B
    for file in "$1"/*; do
        case $file in
        */run.json) sed '/"timing"/,$d' "$file" >a && sed '/"timing"/,$d' "$2/run.json" >b && cmp a b || return 1 ;;
        *) cmp "$file" "$2/${file##*/}" || return 1 ;;
        esac
    done
    test "$(ls -A "$1")" = "$(ls -A "$2")"
}

# Runs, stops after a while that grows, or, every other time, once a checkpoint was written, and runs again until it is
# done; $stops: how often it was stopped, $kept: how often a checkpoint was there then.
persist() { # PLACE ARGUMENT...
    place_=$1
    shift
    stops=0 kept=0
    while [ "$stops" -lt 60 ]; do
        "$PYTHON" - "$stops" "$FESCUE" fill -q "$@" -o "$place_" 2>err <<'PYTHON'
import os, signal, subprocess, sys, time
n, command = int(sys.argv[1]), sys.argv[2:]
checkpoint = command[command.index("-o") + 1] + "/.fescue-checkpoint"
def written():
    return os.stat(checkpoint).st_mtime_ns if os.path.exists(checkpoint) else 0
before, began = written(), time.monotonic()
run = subprocess.Popen(command + ["--checkpoint-every", "0.02", "--threads", str(1 + n % 3)])
while run.poll() is None and not (written() not in (0, before) if n % 2 else time.monotonic() - began > 0.15 * 2**n):
    time.sleep(0.002)
if run.returncode is None:
    run.send_signal((signal.SIGTERM, signal.SIGINT, signal.SIGHUP)[n % 3])
status = run.wait()
sys.exit(76 if status < 0 else status) # 76: before it listened to signals
PYTHON
        got=$?
        [ "$got" -ne 0 ] || return 0
        stops=$((stops + 1))
        [ "$got" -ne 76 ] || continue
        [ "$got" -eq 75 ] || return 1
        grep -Eq '^fescue: asked to stop; (the same command goes on from|nothing was written)' err || return 1
        [ ! -e "$place_/.fescue-checkpoint" ] || kept=$((kept + 1))
    done
    return 1
}

"$FESCUE" sow -q --rows 300 --columns 200 --rank 4 --noise 0.3 --seen 0.4 --offset-scale 1 --truth factors -o sown
table=sown/table.mtx
gzip -dc "$root/datasets-synthetic/fen-levels/table.csv.gz" | head -n 250 | cut -d, -f1-15 >fen.csv

try_way() { # NAME TABLE ARGUMENT...
    name=$1 source=$2
    shift 2
    "$FESCUE" fill -q "$source" "$@" -o "whole-$name" 2>err
    verdict $? "$name: uninterrupted" err
    persist "parts-$name" "$source" "$@"
    verdict $? "$name: stopped and started until it is done" err
    check "$name: it was stopped ($stops times, $kept with a checkpoint)" test "$kept" -gt 0
    check "$name: the same bytes" same "whole-$name" "parts-$name"
    check "$name: no checkpoint is left" test ! -e "parts-$name/.fescue-checkpoint"
}
try_way evidence $table
try_way path $table --solver fixed-rank-cg --rank-most 8
try_way time fen.csv --time-axis rows --rank-most 6
[ -z "$SOLVERS" ] ||
    "$FESCUE" sow -q --rows 500 --columns 400 --rank 8 --noise 1 --seen 0.3 --truth factors -o middle
for solver in $SOLVERS; do
    try_way $solver middle/table.mtx --solver $solver --rank 9 --folds 0 --tolerance 0 --iterations 60 --write factors
done

# ---- what is not of this run ------------------------------------------------------------------------------------------
stop_early() { # PLACE ARGUMENT...
    place_=$1
    shift
    rm -rf "$place_"
    for wait_ in 0.7 1.5 3 6 12; do
        "$FESCUE" fill -q large/table.mtx -o "$place_" "$@" 2>err &
        child=$!
        sleep $wait_
        kill -TERM $child
        wait $child
        [ ! -e "$place_/.fescue-checkpoint" ] || return 0
    done
    return 1
}
"$FESCUE" sow -q --rows 1500 --columns 900 --rank 12 --noise 1 --seen 0.3 --truth factors -o large
slow='--solver evidence'
stop_early other $slow
verdict $? "there is a checkpoint" err
check "and the message names it" grep -q 'the same command goes on from other/.fescue-checkpoint' err
check "nothing else is there" test "$(ls -A other)" = .fescue-checkpoint
cp other/.fescue-checkpoint kept
try 0 fill $table --rank 2 -o other
check "a checkpoint of another input is told" grep -q 'checkpoint of another run: it has input of [0-9]* bytes .*, this one .*; starting over' err
mkdir -p broken
"$PYTHON" -c 'b = bytearray(open("kept", "rb").read()); b[len(b) // 2] ^= 1; open("broken/.fescue-checkpoint", "wb").write(b)'
try 0 fill $table --rank 2 -o broken
check "a broken one is told" grep -q 'its checksum does not fit; starting over' err
check "the results are those of a run without it" same other broken
mkdir -p none
try 0 fill $table --rank 2 --checkpoint-every 0 -o none
check "and of one without checkpoints" same other none
finish
