#!/bin/sh
# SPDX-License-Identifier: MIT
#
# A night among faults: a full disk, results that cannot be written, inputs that vanish or grow, a broken checkpoint, a
# clock that jumps. The error names its cause, no half file lies under a final name, the other jobs go on.
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
    check "the full disk is named" grep -q 'full/res/.*: No space left on device' err
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
    # The ledger itself on a full disk: said, and no job is lost by it.
    mount -o remount,size=256k full
    rm -rf full/* full/.[a-z]*
    sed 's|full/res|res/ledger|; s|res/other|res/ledger-other|; s|in/|../in/|' full.ini >full/plan.ini
    sed -i 's|res/|../res/|' full/plan.ini
    dd if=/dev/zero of=full/rest bs=1k 2>/dev/null
    "$FESCUE" night full/plan.ini >out 2>err
    got=$?
    [ $got -eq 74 ] || [ $got -eq 73 ]
    verdict $? "a ledger that cannot be written is told by the status (got $got)" err
    check "and by the message" grep -q 'full/plan' err
    umount full
    trap 'rm -rf "$private"' EXIT
else
    echo "# no right to mount a small disk: the full disk is left to the sweeps of file calls"
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
check "a file in the way is named" grep -q 'file/res/: cannot be made or opened as a directory: Not a directory' err
check "a place that takes nothing is named" grep -q '/proc/nowhere/: cannot be made' err
check "the other job is done" test -e res/still/run.json

# ---- an input that grows between two jobs, one that vanishes ----------------------------------------------------------
cp in/t3.mtx grows.mtx
cp in/t3.mtx goes.mtx
cat >grows.ini <<'PLAN'
[night]
rank = 2
[first]
input = grows.mtx
output = res/first
[second]
input = grows.mtx
output = res/second
after = first
[third]
input = goes.mtx
output = res/third
after = first
PLAN
(
    n=0
    until [ -e res/first/run.json ] || [ $n -gt 200 ]; do sleep 0.02; n=$((n + 1)); done
    sed '2,$s/^\([0-9]* [0-9]*\) 1200$/\1 1200/' in/t3.mtx | sed 's/^60 40 \([0-9]*\)$/61 40 \1/' >grown.mtx
    mv grown.mtx grows.mtx
    rm goes.mtx
) &
"$FESCUE" night grows.ini >out 2>err
got=$?
wait
check "a night among changing inputs ends (status $got)" test $got -le 1
check "whole or nothing" whole_or_nothing res/third
"$PYTHON" - 2>err <<'PYTHON'
import json, sqlite3
rows = dict(sqlite3.connect("grows-ledger.db").execute("SELECT job, input_sum FROM attempt WHERE state = 'done'"))
for job in ("first", "second"):
    assert rows[job] == json.load(open("res/%s/run.json" % job))["input"]["crc32"], rows
PYTHON
verdict $? "the ledger has the checksum of what was read" err

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
check "a broken checkpoint is told" grep -q 'its checksum does not fit; starting over' err
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
