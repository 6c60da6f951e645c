#!/usr/bin/python3
# SPDX-License-Identifier: MIT
#
# What a night costs beside its jobs: JOBS tables of ROWS x COLUMNS, two workers, one night. Printed:
#
#   processors   seconds of processors of the night and its children, over the sum of the children's
#   waiting      the night's time, over half the sum of its jobs' times: what two processors stand idle or wait
#                (says something on a quiet machine only)
#
# FESCUE=program tests/bench/night_overhead.py [JOBS [ROWS COLUMNS]]
import os, resource, sqlite3, subprocess, sys, tempfile, time

jobs, rows, columns = (int(a) for a in (sys.argv[1:] + ["200", "250", "120"][len(sys.argv) - 1:]))
program = os.path.abspath(os.environ.get("FESCUE", "build/fescue"))
with tempfile.TemporaryDirectory() as place:
    os.chdir(place)
    os.mkdir("in")
    for k in range(jobs):
        subprocess.run([program, "sow", "-q", "--rows", str(rows), "--columns", str(columns), "--rank", "4", "--noise", "0.5",
                        "--seen", "0.4", "--truth", "factors", "-s", str(k + 1), "-o", "sown"], check=True)
        os.rename("sown/table.mtx", "in/t%03d.mtx" % k)
    with open("plan.ini", "w") as plan:
        plan.write("[night]\nthreads = 2\n[all]\ninput = in/t*.mtx\noutput = res/{name}\n")
    before = resource.getrusage(resource.RUSAGE_CHILDREN)
    began = time.monotonic()
    subprocess.run([program, "night", "-q", "plan.ini"], check=True)
    seconds = time.monotonic() - began
    after = resource.getrusage(resource.RUSAGE_CHILDREN)
    whole = after.ru_utime + after.ru_stime - before.ru_utime - before.ru_stime
    done, fits, times = sqlite3.connect("plan-ledger.db").execute(
        "SELECT count(*), sum(processor_seconds), sum(seconds) FROM attempt WHERE state = 'done'").fetchone()
    assert done == jobs
    print("%d jobs of %.2f s of processors: processors %.2f s over %.2f s, %.2f %% more; waiting %.1f s over %.1f s, %.1f %% more"
          % (jobs, fits / jobs, whole, fits, 100 * (whole / fits - 1), seconds, times / 2, 100 * (2 * seconds / times - 1)))
