#!/usr/bin/python3
# SPDX-License-Identifier: MIT
#
# What checkpoints cost a long fit: the same fill with one every second and with none, side by side, so that both have
# the same neighbours; seconds of processors, and the ratio of the sums over all pairs.
#
# FESCUE=program tests/bench/checkpoint_cost.py [PAIRS [OPTIONS OF FILL...]]
import os, subprocess, sys, tempfile

pairs, options = int((sys.argv[1:] or ["2"])[0]), sys.argv[2:] or [
    "--solver", "subgradient", "--rank", "10", "--ridge", "0.01", "--offsets", "none", "--folds", "0", "--tolerance", "0",
    "--iterations", "24"] # some seventy seconds
program = os.path.abspath(os.environ.get("FESCUE", "build/fescue"))

def begin(every, place):
    return subprocess.Popen([program, "fill", "-q", "sown/table.mtx", "--write", "factors", "--threads", "1",
                             "--checkpoint-every", every, "-o", place] + options)

def cpu(run):
    _, status, usage = os.wait4(run.pid, 0)
    assert status == 0
    return usage.ru_utime + usage.ru_stime

with tempfile.TemporaryDirectory() as place:
    os.chdir(place)
    subprocess.run([program, "sow", "-q", "--rows", "3000", "--columns", "1500", "--rank", "12", "--noise", "1", "--seen", "0.3",
                    "--truth", "factors", "-o", "sown"], check=True)
    sums = [0.0, 0.0]
    for k in range(pairs):
        order = ["1", "0"] if k % 2 == 0 else ["0", "1"]
        runs = {every: begin(every, "out" + every) for every in order}
        each = {every: cpu(run) for every, run in runs.items()}
        print("pair %d: %.2f s with, %.2f s without" % (k + 1, each["1"], each["0"]), flush=True)
        sums = [sums[0] + each["1"], sums[1] + each["0"]]
    print("checkpoints cost %.2f %% of %.1f s of processors" % (100 * (sums[0] / sums[1] - 1), sums[1] / pairs))
