#!/bin/sh
# SPDX-License-Identifier: MIT
#
# A signal stops the program: status 75, one line, and nothing under a final name; a checkpoint at most.
. "$(dirname "$0")/library"

# Enough work to be still at it when the signal comes, however fast the machine: it is stopped, never waited for.
"$FESCUE" sow -q --rows 2000 --columns 1500 --rank 12 --noise 1 --seen 0.3 --truth factors -o large

stopped() { # SIGNAL PLACE COMMAND...
    signal_=$1 place_=$2
    shift 2
    "$@" >out 2>err &
    child=$!
    sleep 0.7
    kill -"$signal_" $child
    wait $child
    got=$?
    [ "$got" -eq 75 ]
    verdict $? "status 75 (got $got) after SIG$signal_: $(printf '%s ' "$@" | tr '\n' ' ' | sed "s|.*$FESCUE|fescue|")" err
    check "one line is said" test "$(grep -c . err)" -eq 1
    check "that it was asked to stop" grep -q '^fescue: .*asked to stop' err
    rm -f "$place_/.fescue-checkpoint"
    check "nothing but a checkpoint in $place_" nothing_in "$place_"
}
for signal in TERM INT HUP; do
    # A shell without job control starts its children with SIGINT ignored; env gives it back where it can.
    if [ $signal = INT ]; then
        stopped $signal fill-$signal "$PYTHON" -c 'import os, signal, sys
signal.signal(signal.SIGINT, signal.SIG_DFL)
os.execv(sys.argv[1], sys.argv[1:])' "$FESCUE" fill large/table.mtx --tolerance 0 --iterations 1000000 -o fill-$signal
    else
        stopped $signal fill-$signal "$FESCUE" fill large/table.mtx --tolerance 0 --iterations 1000000 -o fill-$signal
    fi
done
stopped TERM sow-TERM "$FESCUE" sow --rows 100000 --columns 20000 --rank 8 --seen 0.02 --gzip -o sow-TERM

# What nohup ignores stays ignored.
(
    trap '' HUP
    exec "$FESCUE" fill -q --rank 1 --time-limit 2 large/table.mtx --write factors -o nohup
) &
child=$!
sleep 0.3
kill -HUP $child
wait $child
verdict $? "an ignored SIGHUP does not stop it"

# An older run in the same place stays whole.
"$FESCUE" sow -q --rows 40 --columns 20 --seen 0.5 -o small
"$FESCUE" fill -q small/table.mtx -o kept
cp -r kept before
"$FESCUE" fill large/table.mtx --tolerance 0 --iterations 1000000 -o kept >out 2>err &
child=$!
sleep 0.5
kill -TERM $child
wait $child
check "an older run in the same place stays whole" diff -r -x .fescue-checkpoint before kept
finish
