#!/bin/sh
# SPDX-License-Identifier: MIT
#
# Mishaps of single jobs: one that holds more memory than it may, two that hold more than the night has, one that
# crashes, one that is killed; inputs that change while a night is under way. Each is told by name and cause, the other
# jobs go on, the ledger has it all.
#
# A library that is loaded before all others makes the mishaps: once a child of the night opens a table of the name
# mishap-KIND-N.mtx it really takes N megabytes and holds them for two seconds, or dies of signal N.
. "$(dirname "$0")/library"

mkdir in
"$FESCUE" sow -q --rows 40 --columns 30 --rank 2 --seen 0.6 -s 1 -o sown
for name in calm mishap-holds-200 mishap-holds-140 mishap-holds-1 mishap-dies-11 mishap-dies-9; do
    cp sown/table.mtx in/$name.mtx
done
cat >mishap.c <<'C'
#define _GNU_SOURCE
#include <dlfcn.h>
#include <fcntl.h>
#include <signal.h>
#include <stdarg.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <unistd.h>
static pid_t night;
__attribute__((constructor)) static void begin(void)
{
    night = getpid();
}
static void meet(const char *path)
{
    unsigned number;
    const char *name = strstr(path, "mishap-");
    if (name == NULL || getpid() == night)
        return;
    if (sscanf(name, "mishap-dies-%u", &number) == 1)
        kill(getpid(), (int)number);
    if (sscanf(name, "mishap-holds-%u", &number) == 1) {
        close(creat("began", 0666));
        char *held = malloc((size_t)number * 1000000);
        memset(held, 1, (size_t)number * 1000000);
        usleep(2000000);
        free(held);
    }
}
static int open_as(const char *name, const char *path, int flags, int mode)
{
    int (*real)(const char *, int, ...) = (int (*)(const char *, int, ...))dlsym(RTLD_NEXT, name);
    meet(path);
    return real(path, flags, mode);
}
int open(const char *path, int flags, ...)
{
    va_list rest;
    va_start(rest, flags);
    int mode = va_arg(rest, int);
    va_end(rest);
    return open_as("open", path, flags, mode);
}
int open64(const char *path, int flags, ...)
{
    va_list rest;
    va_start(rest, flags);
    int mode = va_arg(rest, int);
    va_end(rest);
    return open_as("open64", path, flags, mode);
}
C
${CC:-gcc} -shared -fPIC -o mishap.so mishap.c -ldl 2>err
verdict $? "mishaps are made" err

mishap() { # STATUS PLAN
    tried "$1" env LD_PRELOAD="$private/mishap.so" "$FESCUE" night "$2"
}

ledger() { # DATABASE QUESTION
    "$PYTHON" -c 'import sqlite3, sys
for row in sqlite3.connect(sys.argv[1]).execute(sys.argv[2]): print(*row, sep="|")' "$1" "$2"
}

# ---- over a job's limit: 50 MB, a tenth more, and 64 MB for program and libraries, but not 200 ------------------------
cat >limit.ini <<'PLAN'
[night]
rank = 2
folds = 0
threads = 2
[greedy]
input = in/mishap-holds-200.mtx
output = res/greedy
memory = 50M
[calm]
input = in/calm.mtx
output = res/calm
[later]
input = in/calm.mtx
output = res/later
after = calm
[after greedy]
input = in/calm.mtx
output = res/after
after = greedy
PLAN
mishap 1 limit.ini
check "the others go on" grep -q 'limit.ini: 4 jobs: 2 done, 1 failed, 1 skipped' err
check "what it held and might have held is said" \
    told 'ended: it held (1[1-9]|2[0-9])[0-9] MB, over its memory limit of 50.0 MB'
check "below its name" eval "grep -A1 '^  greedy (failed)' err | grep -q 'over its memory limit'"
check "nothing of it lies there" test ! -e res/greedy/run.json
check "the others have their results" test -e res/calm/run.json -a -e res/later/run.json
check "the ledger has state, exit and memory" test "$(ledger limit-ledger.db "SELECT state, exit,
    memory > 119000000, message LIKE '%over its memory limit of 50.0 MB%' FROM attempt WHERE job = 'greedy'")" = \
    'failed|71|1|1'
check "and is sound" test "$(ledger limit-ledger.db 'PRAGMA integrity_check')" = ok
check "night.json says so" "$PYTHON" -c 'import json
n = json.load(open("limit-morning/night.json"))
j = {j["job"]: j for j in n["jobs"]}
assert n["exit"] == 1 and j["greedy"]["exit"] == 71 and "50.0 MB" in j["greedy"]["message"], n
assert j["after greedy"]["state"] == "skipped" and j["later"]["state"] == "done", n'

# ---- together over the night's: 100 MB and the margin, one of 140 and one beside it -----------------------------------
cat >crowd.ini <<'PLAN'
[night]
rank = 2
folds = 0
threads = 2
memory = 125M
[wide]
input = in/mishap-holds-140.mtx
output = res/wide
[beside]
input = in/mishap-holds-140.mtx
output = res/beside
PLAN
mishap 0 crowd.ini
check "both are done in the end" grep -q '2 jobs: 2 done' err
check "one was ended and ran again alone" test "$(ledger crowd-ledger.db "SELECT count(*) FROM attempt
    WHERE state = 'stopped' AND exit = 75 AND message LIKE '%runs again alone%'")" = 1

# ---- crashes ----------------------------------------------------------------------------------------------------------
cat >dies.ini <<'PLAN'
[night]
rank = 2
folds = 0
[crashes]
input = in/mishap-dies-11.mtx
output = res/crashes
[killed]
input = in/mishap-dies-9.mtx
output = res/killed
[calm]
input = in/calm.mtx
output = res/calm2
PLAN
mishap 1 dies.ini
check "the third is done" grep -q '3 jobs: 1 done, 2 failed' err
check "a crash is told" grep -q 'died of signal 11 (Segmentation fault)' err
check "a kill is told" told 'killed from outside, at [1-9][0-9.]* [kM]B: by the system for want of memory, or by somebody'
denied "no lock is left of them" test -e res/killed/.fescue-lock -o -e res/crashes/.fescue-lock
# ---- inputs that grow and vanish between two jobs ---------------------------------------------------------------------
cp in/calm.mtx in/grows.mtx
cp in/calm.mtx in/goes.mtx
"$FESCUE" sow -q --rows 50 --columns 30 --rank 2 --seen 0.6 -s 1 -o sown
cat >changes.ini <<'PLAN'
[night]
rank = 2
folds = 0
threads = 1
[first]
input = in/mishap-holds-1.mtx
output = res/first
[second]
input = in/grows.mtx
output = res/second
after = first
[third]
input = in/goes.mtx
output = res/third
after = first
PLAN
rm -f began
(
    n=0
    until [ -e began ] || [ $n -gt 600 ]; do sleep 0.05; n=$((n + 1)); done
    mv sown/table.mtx in/grows.mtx
    rm in/goes.mtx
) &
mishap 1 changes.ini
wait
check "what vanished is told" grep -q 'in/goes.mtx: cannot be opened: No such file or directory' err
check "and the others are done" grep -q '3 jobs: 2 done, 1 failed' err
check "what grew was read as it was then" grep -q '"rows": 50,' res/second/run.json
check "and the ledger knows it by that" test "$(ledger changes-ledger.db "SELECT input_sum FROM attempt
    WHERE job = 'second'")" = "$(sed -n 's/.*"crc32": "\([0-9a-f]*\)".*/\1/p' res/second/run.json | head -n 1)"
denied "nothing of the third lies there" test -e res/third/run.json
cp in/calm.mtx in/goes.mtx
mishap 0 changes.ini
check "the next night has only the third to do" grep -q '3 jobs: 1 done, 2 unchanged' err

try 0 night --history dies.ini
check "the history has what was said" grep -q '^ *died of signal 11' out
finish
