#!/bin/sh
# SPDX-License-Identifier: MIT
#
# A night among faults: a full disk, a read-only one, results that cannot be written, a broken checkpoint, a clock that
# jumps. The error names its cause, no half file lies under a final name, the other jobs go on. (Inputs that vanish or
# grow are in night_mishaps.sh.)
. "$(dirname "$0")/library"

mkdir in
for k in 1 2 3; do
    "$FESCUE" sow -q --rows 60 --columns 40 --rank 2 --noise 0.2 --seen 0.5 --truth factors -s $k -o sown
    mv sown/table.mtx in/t$k.mtx
done

# Complete or nothing: a directory without run.json holds no result.
whole_or_nothing() { # DIRECTORY
    [ -e "$1/run.json" ] || [ ! -e "$1" ] || [ -z "$(ls -A "$1" | grep -v '^\.fescue-')" ]
}

nothing_like() { # DIRECTORY PATTERN
    [ ! -d "$1" ] || [ -z "$(find "$1" -name "$2")" ]
}

# ---- a full disk, as far as one can be had ----------------------------------------------------------------------------
mkdir full
if mount -t tmpfs -o size=48k none full 2>/dev/null; then
    trap 'umount "$private/full"; rm -rf "$private"' EXIT
    cat >full.ini <<'PLAN'
[night]
rank = 2
checkpoint-every = 0.01
[full]
input = in/t1.mtx
output = full/res
[other]
input = in/t2.mtx
output = res/other
PLAN
    try 1 night full.ini
    check "the full disk is named" told 'full/res/.*: No space left on device'
    check "the other job is done" test -e res/other/run.json
    check "no half results on the full disk" whole_or_nothing full/res
    # At every stage: room for more and more.
    for room in 4 16 64 128 192 256; do
        rm -rf full/* full/.[a-z]*
        mount -o remount,size=${room}k full
        "$FESCUE" night -q full.ini --again 2>err
        got=$?
        [ $got -eq 0 ] || [ $got -eq 1 ]
        verdict $? "status 0 or 1 with $room kB (got $got)" err
        check "whole or nothing with $room kB" whole_or_nothing full/res
    done
    # The ledger and the morning on a full disk, at every stage: said, and no job is hurt by it.
    rm -rf full/* full/.[a-z]*
    mount -o remount,size=512k full
    sed 's|full/res|../res/led|; s|res/other|../res/led-other|; s|in/|../in/|' full.ini >full/plan.ini
    for room in 0 24 48 72 96 112 128 144 160; do
        rm -rf full/plan-* full/rest
        dd if=/dev/zero of=full/rest bs=1k 2>/dev/null
        truncate -s -${room}k full/rest
        "$FESCUE" night --again full/plan.ini >out 2>err
        got=$?
        [ $got -eq 0 ] || { [ $got -ge 73 ] && [ $got -le 74 ]; }
        verdict $? "$room kB for ledger and morning: status 0, 73 or 74 (got $got)" err
        [ $got -eq 0 ] || check "and the message names what and why" told 'full/plan-.*(full|space)'
        [ ! -e full/plan-morning/night.json ] ||
            check "a morning is whole" test -s full/plan-morning/summary.txt -a -s full/plan-morning/index.html
        check "no half page" nothing_like full/plan-morning '*.part'
        [ $got -ne 0 ] || break
    done
    rm full/rest
    "$FESCUE" night full/plan.ini >out 2>err
    verdict $? "with room the night goes on" err
    check "and knows its jobs" grep -q '2 jobs: 2 unchanged' err
    check "the ledger is sound" test "$("$PYTHON" -c 'import sqlite3
print(sqlite3.connect("full/plan-ledger.db").execute("PRAGMA integrity_check").fetchone()[0])')" = ok
    # A disk that takes nothing at all.
    rm -rf full/* full/.[a-z]*
    mount -o remount,ro full
    try 1 night full.ini
    check "the read-only disk is named" told 'full/res.*: Read-only file system'
    check "the other job is done or unchanged" grep -q '2 jobs: 1 [a-z]*, 1 failed' err
    umount full
    trap 'rm -rf "$private"' EXIT
else
    echo "ok $((tests + 1)) - full and read-only disks # SKIP no right to mount one; the sweeps of file calls fail each call"
    tests=$((tests + 1))
fi

# ---- results that cannot be written -----------------------------------------------------------------------------------
echo text >file
cat >closed.ini <<'PLAN'
[night]
rank = 2
[closed]
input = in/t1.mtx
output = file/res
[nowhere]
input = in/t1.mtx
output = /proc/nowhere
[other]
input = in/t2.mtx
output = res/still
PLAN
try 1 night closed.ini
check "a file in the way is named" told 'file/res/: cannot be made or opened as a directory: Not a directory'
check "a place that takes nothing is named" grep -q '/proc/nowhere/: cannot be made' err
check "the other job is done" test -e res/still/run.json

# ---- a broken checkpoint ----------------------------------------------------------------------------------------------
mkdir -p res/broken
head -c 5000 /dev/urandom >res/broken/.fescue-checkpoint
cat >broken.ini <<'PLAN'
[broken]
input = in/t1.mtx
output = res/broken
rank = 2
PLAN
try 0 night broken.ini
check "a broken checkpoint is told" told 'its checksum does not fit; starting over'
check "and gone" test ! -e res/broken/.fescue-checkpoint

# ---- a clock that jumps -----------------------------------------------------------------------------------------------
cat >clock.c <<'C'
#define _GNU_SOURCE
#include <dlfcn.h>
#include <stdlib.h>
#include <time.h>
static time_t jump(void)
{
    static int calls; /* forwards, back, forwards, ... by days */
    return (++calls % 7 - 3) * 86400L * 3;
}
int clock_gettime(clockid_t which, struct timespec *now)
{
    int (*real)(clockid_t, struct timespec *) = (int (*)(clockid_t, struct timespec *))dlsym(RTLD_NEXT, "clock_gettime");
    int result = real(which, now);
    if (which == CLOCK_REALTIME)
        now->tv_sec += jump();
    return result;
}
time_t time(time_t *to)
{
    struct timespec now;
    clock_gettime(CLOCK_REALTIME, &now);
    if (to)
        *to = now.tv_sec;
    return now.tv_sec;
}
C
${CC:-gcc} -shared -fPIC -o clock.so clock.c -ldl 2>err
verdict $? "a clock that jumps is made" err
sed 's/^\[broken\]/[night]\nfor = 1h\n[jumps]/; s|res/broken|res/jumps|' broken.ini >jumps.ini
tried 0 env LD_PRELOAD="$private/clock.so" "$FESCUE" night jumps.ini
tried 0 env LD_PRELOAD="$private/clock.so" "$FESCUE" night jumps.ini
check "the second night knows the first" grep -q '1 unchanged' err
check "the results are those of a calm clock" cmp res/jumps/filled.mtx res/broken/filled.mtx
finish
